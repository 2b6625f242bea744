"""Loads the provider into the host and takes it out again."""

from qgis.core import Qgis, QgsApplication, QgsMessageLog

from .packages import missing_packages
from .translation import install_translator, remove_translator


class Shell:
    """The plugin as the host sees it.

    Parameters
    ----------
    iface : QgisInterface or None
        None when the host runs without a window.
    """

    def __init__(self, iface):
        self.iface = iface
        self.provider = None
        self._actions = []
        self._translator = None

    def initProcessing(self):
        """Register the provider, or say which package is missing."""
        self._translator = install_translator()
        problems = missing_packages()
        for sentence in problems:
            QgsMessageLog.logMessage(sentence, "Steadfield", Qgis.MessageLevel.Warning)
            if self.iface is not None:
                self.iface.messageBar().pushMessage(
                    "Steadfield", sentence, Qgis.MessageLevel.Warning, 0
                )
        if problems:
            return
        from .provider import Provider

        self.provider = Provider()
        QgsApplication.processingRegistry().addProvider(self.provider)

    def initGui(self):
        self.initProcessing()
        if self.provider is not None:
            from .model_actions import register_actions

            self._actions = register_actions()

    def unload(self):
        if self.provider is not None:
            from .model_actions import remove_actions

            remove_actions(self._actions)
            self._actions = []
            QgsApplication.processingRegistry().removeProvider(self.provider)
            self.provider = None
        remove_translator(self._translator)
        self._translator = None
