"""Make the checkout importable as ``steadfield``, whatever its folder is called."""

import importlib.util
import os
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")


def import_checkout():
    """Load the checkout as the package ``steadfield`` once."""
    if "steadfield" in sys.modules:
        return
    specification = importlib.util.spec_from_file_location(
        "steadfield", ROOT / "__init__.py", submodule_search_locations=[str(ROOT)]
    )
    package = importlib.util.module_from_spec(specification)
    sys.modules["steadfield"] = package
    specification.loader.exec_module(package)


import_checkout()
