"""Whether the Python packages of the numeric core are there, told before they are imported."""

import re
import sysconfig
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

from .text import tr

NEEDED = {"numpy": (1, 21), "scipy": (1, 8), "shapely": (2, 0)}


def _parts(text):
    return tuple(int(piece) for piece in re.findall(r"\d+", text)[:2])


def _options(standard_library):
    """What the installer needs where the system keeps the packages (PEP 668)."""
    kept = (Path(standard_library) / "EXTERNALLY-MANAGED").exists()
    return "--user --break-system-packages " if kept else ""


def missing_packages(found=version, standard_library=None):
    """One sentence for each package that is missing or too old.

    Parameters
    ----------
    found : callable
        Takes a package's name and gives its version, or raises PackageNotFoundError.
    standard_library : path or None
        Folder of the standard library; None: that of this Python.

    Returns
    -------
    list of str
        Empty when all is well; short, since the message bar of the window shows a line or two.
    """
    options = _options(standard_library or sysconfig.get_path("stdlib"))
    sentences = []
    for name, least in NEEDED.items():
        wanted = ".".join(str(part) for part in least)
        try:
            there = found(name)
        except PackageNotFoundError:
            there = None
        if there is not None and _parts(there) >= least:
            continue
        state = tr("it is missing") if there is None else tr("found: {}").format(there)
        sentences.append(
            tr(
                "{0} {1} or newer is needed ({2}). Install it: python3 -m pip install {3}'{0}>={1}'"
            ).format(name, wanted, state, options)
        )
    return sentences
