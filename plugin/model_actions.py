"""What the toolbox offers for ready models on a right click: a copy in the model designer."""

from qgis.core import QgsApplication, QgsProcessingModelAlgorithm
from qgis.PyQt.QtGui import QIcon

from .ready_models import ICON
from .text import tr


def copy_of(model):
    """A model of the user's own, free of the file that came with the plugin.

    The designer would save the model itself into the plugin's folder, where an update wipes it out.

    Parameters
    ----------
    model : QgsProcessingModelAlgorithm

    Returns
    -------
    QgsProcessingModelAlgorithm
    """
    copy = QgsProcessingModelAlgorithm()
    copy.loadVariant(model.toVariant())
    copy.setName(model.displayName())
    copy.setGroup("")
    copy.setSourceFilePath("")
    return copy


def register_actions():
    """Add the entry to the context menu of the toolbox; returns what `remove_actions` takes back.

    Nothing is added where the host's own Processing plugin is switched off.
    """
    try:
        from processing.gui.ContextAction import ContextAction
        from processing.gui.ProviderActions import ProviderContextMenuActions
    except ImportError:
        return []

    class OpenCopy(ContextAction):
        """Opens a copy of a ready model in the model designer."""

        def __init__(self):
            super().__init__()
            self.name = tr("Open a copy in the model designer")

        def icon(self):
            return QIcon(str(ICON))

        def isEnabled(self):
            return is_ready_model(self.itemData)

        def execute(self):
            from processing.modeler.ModelerDialog import ModelerDialog

            dialog = ModelerDialog.create(copy_of(self.itemData))
            dialog.update_model.connect(refresh_models)
            dialog.show()
            dialog.activate()

    actions = [OpenCopy()]
    ProviderContextMenuActions.registerProviderContextMenuActions(actions)
    return actions


def remove_actions(actions):
    """Take the entries back out of the context menu."""
    if actions:
        from processing.gui.ProviderActions import ProviderContextMenuActions

        ProviderContextMenuActions.deregisterProviderContextMenuActions(actions)


def is_ready_model(algorithm):
    """Whether an algorithm is a model that came with the plugin."""
    if not isinstance(algorithm, QgsProcessingModelAlgorithm):
        return False
    return algorithm.provider() is not None and algorithm.provider().id() == "steadfield"


def refresh_models():
    """Let the toolbox see a model that was saved in the designer."""
    provider = QgsApplication.processingRegistry().providerById("model")
    if provider is not None:
        provider.refreshAlgorithms()
