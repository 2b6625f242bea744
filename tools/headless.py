"""The host without a window, with the provider registered; shared by the tools."""

import os
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")


class Host:
    """A running host application; close it with ``leave``."""

    def __init__(self):
        from qgis.core import QgsApplication, QgsProcessingContext, QgsProcessingFeedback

        self.application = QgsApplication([], True)
        self.application.initQgis()
        plugins = Path(QgsApplication.pkgDataPath()) / "python" / "plugins"
        sys.path.append(str(plugins))
        sys.path.insert(0, str(ROOT / "tests"))
        import conftest

        conftest.import_checkout()
        from processing.core.Processing import Processing

        Processing.initialize()
        from steadfield.plugin.provider import Provider

        self.provider = Provider()
        QgsApplication.processingRegistry().addProvider(self.provider)
        self._context = QgsProcessingContext
        self._feedback = QgsProcessingFeedback

    def run(self, algorithm, **parameters):
        """Run an algorithm of the provider, say how long it took, return its results."""
        import processing

        feedback = self._feedback(False)
        started = time.perf_counter()
        results = processing.run(
            f"steadfield:{algorithm}", parameters, feedback=feedback, context=self._context()
        )
        print(f"{algorithm:18s} {time.perf_counter() - started:6.1f} s", flush=True)
        return results

    def leave(self):
        """End at once: the host's own end may wait for threads that nobody needs any more."""
        sys.stdout.flush()
        os._exit(0)
