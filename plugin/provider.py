"""The one provider; the list of algorithms stands here and nowhere else."""

from pathlib import Path

from qgis.core import QgsApplication, QgsProcessingProvider
from qgis.PyQt.QtGui import QIcon

from .ready_models import ready_models
from .text import tr

ICON = Path(__file__).resolve().parent.parent / "icons" / "steadfield.svg"

ALGORITHMS = {
    # module in algorithms: class
    "centrespread": "CentreSpread",
    "recordcheck": "RecordCheck",
    "practicedistrict": "PracticeDistrict",
    "adaptivedensity": "AdaptiveDensity",
    "bandwidthadvice": "BandwidthAdvice",
    "densityratio": "DensityRatio",
    "densityoutlines": "DensityOutlines",
    "inkblend": "InkBlend",
    "agreement": "Agreement",
    "rawink": "RawInk",
    "gridvariance": "GridVariance",
    "unitvariance": "UnitVariance",
    "correlationspread": "CorrelationSpreadAlgorithm",
    "cellsize": "CellSize",
    "safehexagons": "SafeHexagons",
    "safesurface": "SafeSurface",
    "releaseaudit": "ReleaseAudit",
}


class Provider(QgsProcessingProvider):
    """Offers the algorithms to the host."""

    def id(self):
        return "steadfield"

    def name(self):
        return "Steadfield"

    def longName(self):
        return tr("Steadfield: maps of confidential records")

    def icon(self):
        return QIcon(str(ICON))

    def svgIconPath(self):
        return str(ICON)

    def loadAlgorithms(self):
        for module, name in ALGORITHMS.items():
            # not import_module, which the host does not see, so that it would keep the module
            # when the plugin is unloaded and mix it with those of the next version
            held = __import__(f"algorithms.{module}", globals(), None, [name], 2)
            self.addAlgorithm(getattr(held, name)())
        registry = QgsApplication.processingRegistry()
        if registry.providerById(self.id()) is None:
            # the steps of a model are looked up by id, which works from then on
            registry.providerAdded.connect(self._registered)
            return
        for model in ready_models():
            self.addAlgorithm(model)

    def _registered(self, identifier):
        if identifier == self.id():
            QgsApplication.processingRegistry().providerAdded.disconnect(self._registered)
            self.refreshAlgorithms()
