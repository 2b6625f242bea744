"""Release audit."""

import numpy as np
from qgis.core import QgsProcessingParameterMultipleLayers

from ..plugin import looks
from ..plugin.host import POLYGONS
from ..plugin.outputs import Column
from ..plugin.text import number, said, tr
from . import releaseaudit_page
from .base import SteadfieldAlgorithm
from .numeric.differencing import EFFORT, audit
from .numeric.errors import InputError
from .numeric.progress import part
from .releaseaudit_inputs import read_releases
from .releaseaudit_page import FILLS, KIND_WORDS


class ReleaseAudit(SteadfieldAlgorithm):
    ID = "releaseaudit"
    NAME = tr("Release audit")
    GROUP = "release"
    QUESTION = "safe"
    HELP = tr(
        "Looks at published layers as an outsider would: lays all zonings over each other, "
        "subtracts zones from unions of zones, undoes withholding and rounding where several "
        "tables allow it, and names all ground where fewer records than the least count can be "
        "worked out. Give every layer that is or will be public for the same records. A release "
        "is never called clean when the tables contradict each other or the search was not "
        "completed. The audit knows nothing of what people know from elsewhere, nor of what "
        "everyone in a cell shares."
    )
    TAGS = (
        tr("disclosure"),
        tr("differencing"),
        tr("confidentiality"),
        tr("privacy"),
        tr("subtraction"),
        tr("overlap"),
    )

    def define(self):
        self.add(
            QgsProcessingParameterMultipleLayers("RELEASES", tr("Published layers"), POLYGONS),
            tr(
                "All layers of counts that are or will be published about the same records: "
                "hexagons, official zones, earlier releases. A null count counts as withheld."
            ),
        )
        self.add_names()
        self.add_text(
            "COUNT_FIELDS",
            tr("Count fields"),
            tr(
                "The field with the counts for each layer, apart by semicolons. Empty: a field "
                "named count or the like, or the only field with numbers."
            ),
        )
        self.add_text(
            "KINDS",
            tr("What the counts are"),
            tr(
                "For each layer, apart by semicolons, or one for all: exact; rounded 5 (to 5 at "
                "random); nearest 5; noise 0.5 (two-sided geometric noise of that privacy budget). "
                "Add “, withheld below 10” where everyone knows that nulls are counts below 10. "
                "Empty: exact, and nulls may be anything."
            ),
        )
        self.add_text(
            "TOTALS",
            tr("Published totals"),
            tr(
                "The sum over each layer where it is published too, apart by semicolons, such as "
                "“1250;;” for three layers. Empty: no total is published."
            ),
        )
        self.add_points(
            "RECORDS",
            tr("Point records"),
            tr(
                "The confidential records: each risk then carries its true count, and the outputs "
                "are confidential. Empty: what an outsider could infer."
            ),
            optional=True,
        )
        self.add_number(
            "LEAST_COUNT",
            tr("Least count"),
            tr(
                "Fewer records than this must not be recognisable. The number belongs to the "
                "data's owner and to law; 3, 5 and 10 are in use."
            ),
            default=10,
            least=2,
            whole=True,
        )
        self.add_text(
            "RELEASE_ORDER",
            tr("Order of releases"),
            tr(
                "For releases over time: a number for each layer, apart by semicolons, larger for "
                "later ones, such as “1;1;2”. Records are taken to be added between releases and "
                "never removed. Empty: all layers count the same records."
            ),
            advanced=True,
        )
        self.add_text(
            "LABEL_FIELDS",
            tr("Label fields"),
            tr("The field that names the zones of each layer, apart by semicolons."),
            advanced=True,
        )
        self.add_length(
            "TOLERANCE",
            tr("Sliver tolerance"),
            tr(
                "Pieces narrower than this count as drawing mismatch. Empty: 0.2 % of the typical "
                "zone width of the finest layer."
            ),
            advanced=True,
        )
        self.add_number(
            "EFFORT",
            tr("Effort"),
            tr(
                "Where zones of three or more layers cross, the search stops after so many linear "
                "programmes and says what it left open."
            ),
            default=EFFORT,
            least=1,
            whole=True,
            advanced=True,
        )
        self.add_flag(
            "STOP",
            tr("Stop with an error unless clean"),
            tr("A model halts here when something is disclosed; nothing is written then."),
            advanced=True,
        )
        self.add_working_crs()
        self.add_polygon_output(
            "RISKS", tr("Risks"), tr("Ground that is disclosed, how, and what can be worked out.")
        )
        self.add_report()
        self.add_numbers(
            CLEAN=tr("Clean: 1 yes, 0 no"),
            DISCLOSED_REGIONS=tr("Disclosed regions"),
            WORST_COUNT=tr("Smallest disclosed count, 0 for none"),
            EMPTY_REGIONS=tr("Regions known to be empty"),
            CONTRADICTIONS=tr("Counts that contradict others"),
            UNDECIDED=tr("Pieces of ground left open by the search"),
        )

    def work(self, job):
        published = read_releases(job)
        records = None
        if job.given("RECORDS"):
            read = job.records("RECORDS")
            records = read.x, read.y
        least_count = job.whole("LEAST_COUNT")
        found = audit(
            [one.table for one in published],
            least_count,
            tolerance=job.length("TOLERANCE"),
            records=records,
            effort=job.whole("EFFORT"),
            progress=part(job.progress, 0.05, 0.9),
        )
        warn_of(job, published, found, records)
        if job.flag("STOP") and not found.clean:
            raise InputError(releaseaudit_page.stop_words(found, least_count))
        write_risks(job, found, records is not None)
        job.give("CLEAN", int(found.clean))
        job.give("DISCLOSED_REGIONS", len(found.risks))
        job.give("WORST_COUNT", found.worst_count)
        job.give("EMPTY_REGIONS", len(found.empty))
        job.give("CONTRADICTIONS", len(found.contradictions))
        job.give("UNDECIDED", found.undecided)
        if job.wanted("REPORT"):
            report = releaseaudit_page.report(job, published, found, least_count)
            job.write_report(report, releaseaudit_page.METHOD, releaseaudit_page.CAUTIONS)


def warn_of(job, published, found, records):
    """Say what a reader must know before trusting the answer."""
    laid = found.overlay
    for place, one in enumerate(published):
        rows = laid.membership[laid.layer == place]
        twice = int((np.asarray(rows.sum(axis=0)).ravel() > 1).sum())
        if twice:
            job.warn(
                tr("{}: zones overlap each other in {} places.").format(
                    one.table.name, number(twice)
                )
            )
    if found.contradictions:
        job.warn(
            tr(
                "The layers contradict each other, so that not all of them count the same records "
                "(or a border is drawn too differently): {}."
            ).format("; ".join(map(said, found.contradictions[:5])))
        )
    if found.undecided:
        job.warn(
            tr("{} pieces of ground could not be decided within the effort; raise it.").format(
                number(found.undecided)
            )
        )
    if records is not None and len({one.table.release for one in published}) > 1:
        job.warn(tr("True counts are not given where releases differ in time."))


def write_risks(job, found, confirmed):
    """RISKS: each region with its interval and derivation, the smallest counts first."""
    risks = [*found.risks, *found.empty]
    columns = [
        Column("kind", "text", [risk.kind for risk in risks], tr("Kind")),
        Column("lower", "int", [risk.lower for risk in risks], tr("Records at least")),
        Column("upper", "int", [risk.upper for risk in risks], tr("Records at most")),
        Column("derivation", "text", [said(risk.words) for risk in risks], tr("Derivation")),
        Column(
            "area_km2",
            "float",
            [risk.polygon.area * job.working.square_kilometres for risk in risks],
            tr("Area (km²)"),
        ),
    ]
    if confirmed:
        columns.insert(
            3,
            Column(
                "true_count", "int", [risk.true_count for risk in risks],
                tr("True count (confidential)"),
            ),
        )  # fmt: skip
    shapes = np.empty(len(risks), object)
    shapes[:] = [risk.polygon for risk in risks]
    classes = [(kind, colour, KIND_WORDS[kind]) for kind, colour in FILLS.items()]
    job.write_layer("RISKS", columns, shapes, "polygon", looks.categories("kind", classes))
