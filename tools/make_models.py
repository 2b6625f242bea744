"""Write the ready models of plugin/models: ``python3 tools/make_models.py [folder]``.

Run it on the oldest host version that the plugin supports; later ones read what older ones write.
"""

import os
import sys
from pathlib import Path

# the order of attributes in a file otherwise changes from run to run
os.environ["QT_HASH_SEED"] = "0"

from headless import ROOT, Host

FOLDER = ROOT / "plugin" / "models"


def write(folder):
    """Write every model into a folder; returns the paths."""
    from model_plans import PLANS

    folder.mkdir(parents=True, exist_ok=True)
    written = []
    for name, plan in PLANS.items():
        path = folder / f"{name}.model3"
        if not plan().toFile(str(path)):
            raise OSError(f"{path.name} cannot be written")
        written.append(path)
    return written


if __name__ == "__main__":
    host = Host()
    for path in write(Path(sys.argv[1]).resolve() if len(sys.argv) > 1 else FOLDER):
        print(path.name)
    host.leave()
