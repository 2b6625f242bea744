"""What all algorithms share: parameters of one kind made one way, and errors in words."""

from pathlib import Path

import numpy as np
from qgis.core import (
    QgsProcessingAlgorithm,
    QgsProcessingException,
    QgsProcessingOutputNumber,
    QgsProcessingParameterBoolean,
    QgsProcessingParameterCrs,
    QgsProcessingParameterDefinition,
    QgsProcessingParameterDistance,
    QgsProcessingParameterEnum,
    QgsProcessingParameterFeatureSink,
    QgsProcessingParameterFeatureSource,
    QgsProcessingParameterField,
    QgsProcessingParameterFileDestination,
    QgsProcessingParameterMultipleLayers,
    QgsProcessingParameterNumber,
    QgsProcessingParameterRasterDestination,
    QgsProcessingParameterRasterLayer,
    QgsProcessingParameterString,
)
from qgis.PyQt.QtGui import QIcon

from ..plugin.host import METRES, POINTS, POLYGONS, RASTERS, TABLE
from ..plugin.text import said, tr
from .job import Job
from .numeric.errors import CancelledError, InputError

ROOT = Path(__file__).resolve().parent.parent

# a dialog shows 0.5 rather than 0.500000
SHORT_DECIMALS = {"widget_wrapper": {"decimals": 3}}

GROUPS = {
    "records": tr("Records"),
    "density": tr("Density"),
    "together": tr("Layers together"),
    "zoning": tr("Zoning variance"),
    "release": tr("Safe release"),
}

QUESTIONS = {
    "cut": tr(
        "Would the map say the same had the boundaries, or the cell size, been drawn otherwise?"
    ),
    "real": tr(
        "Is what looks like a concentration real, or noise, an edge, or only where people live?"
    ),
    "safe": tr("Can anyone be picked out, alone or combined with what is already published?"),
}


class SteadfieldAlgorithm(QgsProcessingAlgorithm):
    """Base of every algorithm; a subclass sets the names, ``define`` and ``work``."""

    ID = ""
    NAME = ""
    GROUP = ""
    QUESTION = ""
    HELP = ""
    TAGS = ()

    def define(self):
        """Add the parameters and outputs in the order of thought."""
        raise NotImplementedError

    def work(self, job):
        """Read, compute, write; raises InputError in words and CancelledError."""
        raise NotImplementedError

    def name(self):
        return self.ID

    def displayName(self):
        return self.NAME

    def group(self):
        return GROUPS[self.GROUP]

    def groupId(self):
        return self.GROUP

    def tags(self):
        return list(self.TAGS)

    def icon(self):
        return QIcon(str(ROOT / "icons" / f"{self.ID}.svg"))

    def svgIconPath(self):
        return str(ROOT / "icons" / f"{self.ID}.svg")

    def helpUrl(self):
        page = ROOT / "plugin" / "help" / f"{self.ID}.html"
        return page.as_uri() if page.exists() else ""

    def shortHelpString(self):
        lines = [f"<p>{self.HELP}</p>", f"<p><i>{QUESTIONS[self.QUESTION]}</i></p>"]
        for definition in self.parameterDefinitions():
            if definition.help():
                lines.append(f"<p><b>{definition.description()}</b>: {definition.help()}</p>")
        return "\n".join(lines)

    def createInstance(self):
        return type(self)()

    def initAlgorithm(self, configuration=None):
        self.define()

    def processAlgorithm(self, parameters, context, feedback):
        job = Job(self, parameters, context, feedback)
        try:
            job.check_tables()
            job.check_fields()
            # sound results of the geometry library can leave this flag of the processor set; the
            # host would put a warning with a traceback into its log
            with np.errstate(invalid="ignore"):
                self.work(job)
            job.progress(1.0)
        except CancelledError as error:
            job.discard()
            raise QgsProcessingException(tr("Cancelled; nothing was written.")) from error
        except InputError as error:
            job.discard()
            raise QgsProcessingException(said(error)) from error
        except MemoryError as error:
            job.discard()
            raise QgsProcessingException(
                tr("The memory of this machine ran out; choose larger cells or fewer records.")
            ) from error
        except BaseException:
            job.discard()
            raise
        return job.results

    def add(self, parameter, help="", advanced=False):
        """Add a parameter with its help; advanced ones are folded away."""
        parameter.setHelp(help)
        if advanced:
            flag = QgsProcessingParameterDefinition.Flag.FlagAdvanced
            parameter.setFlags(parameter.flags() | flag)
        self.addParameter(parameter)

    def add_points(self, name, label, help, optional=False):
        """Add a point layer."""
        self.add(
            QgsProcessingParameterFeatureSource(name, label, [POINTS], optional=optional), help
        )

    def add_weighted_records(self):
        """Add RECORDS and WEIGHT, points that stand for one case or for several."""
        self.add_points("RECORDS", tr("Records"), tr("One point for each record or place."))
        self.add_field(
            "WEIGHT",
            tr("Weight"),
            "RECORDS",
            tr("Number of cases at each point. Empty: each point is one."),
        )

    def add_adaptation(self):
        """Add ADAPT, how strongly bandwidths follow the density."""
        self.add_number(
            "ADAPT",
            tr("Adaptation"),
            tr("0: one bandwidth everywhere. 0.5: the square-root law. 1: the strongest."),
            default=0.5,
            least=0.0,
            most=1.0,
        )

    def add_trim(self):
        """Add TRIM, how far bandwidths may leave the overall one."""
        self.add_number(
            "TRIM",
            tr("Trim"),
            tr("Bandwidths stay within this multiple, and fraction, of the overall bandwidth."),
            default=5.0,
            least=1.0,
            advanced=True,
        )

    def add_polygons(self, name, label, help, optional=False, advanced=False):
        """Add a polygon layer."""
        self.add(
            QgsProcessingParameterFeatureSource(name, label, [POLYGONS], optional=optional),
            help,
            advanced,
        )

    def add_boundary(self, help=""):
        """Add BOUNDARY, the optional study area."""
        words = tr("Polygons of the study area; what lies outside gets no value.")
        self.add_polygons("BOUNDARY", tr("Boundary"), help or words, optional=True)

    def add_names(self):
        """Add NAMES, what the layers of a list are called in legends and reports."""
        self.add_text(
            "NAMES",
            tr("Names of the layers"),
            tr("For legend and report, apart by semicolons. Empty: the layers' own names."),
            advanced=True,
        )

    def add_rasters(self, name, label, help, least=2):
        """Add a list of rasters, and how they are put on one grid."""
        parameter = QgsProcessingParameterMultipleLayers(name, label, RASTERS)
        parameter.setMinimumNumberInputs(least)
        self.add(parameter, help)
        self.add_names()
        self.add(
            QgsProcessingParameterRasterLayer("GRID", tr("Grid to follow"), optional=True),
            tr(
                "A raster whose CRS, extent and cell size the result takes. Empty: the first layer."
            ),
            advanced=True,
        )
        self.add_length(
            "CELL_SIZE",
            tr("Cell size"),
            tr("Side of a pixel. Empty: as in the raster whose grid is followed."),
            advanced=True,
        )
        self.add_number(
            "BAND",
            tr("Band"),
            tr("Which band of each raster is read."),
            default=1,
            least=1,
            whole=True,
            advanced=True,
        )

    def add_field(self, name, label, parent, help, numeric=True, optional=True, advanced=False):
        """Add a field of a layer."""
        any_field = QgsProcessingParameterField.DataType.Any
        kind = QgsProcessingParameterField.DataType.Numeric if numeric else any_field
        self.add(
            QgsProcessingParameterField(name, label, None, parent, kind, False, optional),
            help,
            advanced,
        )

    def add_length(self, name, label, help, default=None, advanced=False, least=0.0):
        """Add a length in metres; without a default, empty and 0 both mean "choose for me"."""
        parameter = QgsProcessingParameterDistance(name, label, default, "", default is None, least)
        parameter.setDefaultUnit(METRES)
        parameter.setMetadata(SHORT_DECIMALS)
        self.add(parameter, help, advanced)

    def add_number(
        self, name, label, help, default=None, least=None, most=None, whole=False,
        optional=False, advanced=False,
    ):  # fmt: skip
        """Add a number without a unit."""
        kind = QgsProcessingParameterNumber.Type.Double
        if whole:
            kind = QgsProcessingParameterNumber.Type.Integer
        parameter = QgsProcessingParameterNumber(name, label, kind, default, optional)
        if default is not None:
            parameter.setMetadata(SHORT_DECIMALS)
        if least is not None:
            parameter.setMinimum(least)
        if most is not None:
            parameter.setMaximum(most)
        self.add(parameter, help, advanced)

    def add_choice(self, name, label, choices, help, default=0, advanced=False):
        """Add a choice; ``choices`` maps the core's key to the words shown."""
        self.add(
            QgsProcessingParameterEnum(name, label, list(choices.values()), False, default),
            help,
            advanced,
        )

    def add_flag(self, name, label, help, default=False, advanced=False):
        """Add a yes or no."""
        self.add(QgsProcessingParameterBoolean(name, label, default), help, advanced)

    def add_text(self, name, label, help, default="", optional=True, advanced=False):
        """Add a line of text, such as a list of numbers."""
        self.add(
            QgsProcessingParameterString(name, label, default, False, optional), help, advanced
        )

    def add_seed(self):
        """Add SEED and the output SEED_USED."""
        self.add_number(
            "SEED",
            tr("Seed of the random numbers"),
            tr("The same seed gives the same result to the bit. Empty: one is drawn and reported."),
            least=0,
            most=2**31 - 1,
            whole=True,
            optional=True,
            advanced=True,
        )
        self.addOutput(QgsProcessingOutputNumber("SEED_USED", tr("Seed used")))

    def add_working_crs(self):
        """Add WORKING_CRS, for those who know which CRS they want."""
        self.add(
            QgsProcessingParameterCrs("WORKING_CRS", tr("Working CRS"), optional=True),
            tr(
                "Distances and areas are taken in this projected CRS. Empty: the layer's own "
                "when it keeps areas within 1 %, otherwise an equal-area CRS near the data."
            ),
            advanced=True,
        )

    def add_raster(self, name, label, help="", optional=False):
        """Add a raster output; an optional one is off until asked for."""
        self.add(
            QgsProcessingParameterRasterDestination(name, label, None, optional, not optional), help
        )

    def add_polygon_output(self, name, label, help="", optional=False, offered=False):
        """Add a polygon layer output; an optional one is off unless the dialog offers it."""
        made = offered or not optional
        self.add(
            QgsProcessingParameterFeatureSink(name, label, POLYGONS, None, optional, made), help
        )

    def add_table(self, name, label, help="", optional=False):
        """Add a table output, a vector output without geometry."""
        self.add(
            QgsProcessingParameterFeatureSink(name, label, TABLE, None, optional, not optional),
            help,
        )

    def add_report(self, optional=True):
        """Add REPORT, a page for the results viewer."""
        self.add(
            QgsProcessingParameterFileDestination(
                "REPORT",
                # the results viewer lists the pages of all runs by these words alone
                tr("{}: report").format(self.NAME),
                tr("HTML pages (*.html)"),
                None,
                optional,
                True,
            ),
            tr("A page with the answer in a sentence, plots, method, parameters and cautions."),
        )

    def add_numbers(self, **labels):
        """Add number outputs, so that the next step of a model can use them."""
        for name, label in labels.items():
            self.addOutput(QgsProcessingOutputNumber(name, label))
