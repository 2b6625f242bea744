"""Whether the Python packages of the numeric core are there, told before they are imported."""

from importlib.metadata import PackageNotFoundError, version

from .text import tr

NEEDED = {"numpy": (1, 21), "scipy": (1, 8), "shapely": (2, 0)}


def _parts(text):
    return tuple(int(piece) for piece in text.split(".")[:2] if piece.isdigit())


def missing_packages(found=version):
    """One sentence for each package that is missing or too old.

    Parameters
    ----------
    found : callable
        Takes a package's name and gives its version, or raises PackageNotFoundError.

    Returns
    -------
    list of str
        Empty when all is well.
    """
    sentences = []
    for name, least in NEEDED.items():
        wanted = ".".join(str(part) for part in least)
        try:
            there = found(name)
        except PackageNotFoundError:
            there = None
        if there is not None and _parts(there) >= least:
            continue
        state = tr("is missing") if there is None else tr("is version {}").format(there)
        sentences.append(
            tr(
                "Steadfield needs the Python package {0} {1} or newer, and it {2}. Install it "
                "for the Python of this application, for example with: "
                "python3 -m pip install '{0}>={1}'"
            ).format(name, wanted, state)
        )
    return sentences
