"""Disclosure-safe hexagons: counts of confidential records, released by rules and methods."""

import numpy as np

from ..plugin.text import number, tr
from .base import SteadfieldAlgorithm
from .numeric import hexagons
from .numeric.errors import InputError
from .numeric.loss import hellinger_distance, rank_correlation
from .numeric.merging import zone_polygons
from .numeric.progress import part
from .numeric.release import release
from .numeric.release_plan import NOISE, ROUND, WITHHOLD
from .safehexagons_layers import write_custodian, write_release, write_totals
from .safehexagons_page import write_page
from .safehexagons_study import METHODS, ORIENTATIONS, TOTALS, prepare


class SafeHexagons(SteadfieldAlgorithm):
    """Count records in hexagons and release only what the rules allow."""

    ID = "safehexagons"
    NAME = tr("Disclosure-safe hexagons")
    GROUP = "release"
    QUESTION = "safe"
    TAGS = (
        tr("disclosure"),
        tr("confidential"),
        tr("privacy"),
        tr("suppression"),
        tr("rounding"),
        tr("differential privacy"),
    )
    HELP = tr(
        "Counts confidential records in hexagons and releases the figures by one of five methods: "
        "withhold what is unsafe, merge it with neighbours, round in two ways, or add noise. The "
        "release carries no true figure of an unsafe hexagon and does not tell why a hexagon was "
        "withheld. Where totals are published too, further hexagons are withheld until linear "
        "programmes show that none can be placed within its protection range. The least count "
        "protects from being singled out; dominance and p % from estimates of a large "
        "contribution; the share rules from learning what everybody in a hexagon has in common. "
        "None protects from what somebody knows already, or from several releases compared: check "
        "those with Release audit. Thresholds are set by the data's owner and by law, not by this "
        "tool."
    )

    def define(self):
        self._add_records()
        self._add_rules()
        self._add_method()
        self.add_number(
            "SEED",
            tr("Secret seed"),
            tr(
                "The same seed gives the same release to the bit, and rounds a hexagon alike in "
                "every release; who knows it can undo part of the protection, so draw all its "
                "digits at random and keep it like a key. Empty: a secret of the system is used "
                "once and forgotten. With noise, a seed makes a rehearsal that is not for release."
            ),
            least=0,
            most=2**31 - 1,
            whole=True,
            optional=True,
            advanced=True,
        )
        self.add_working_crs()
        self.add_polygon_output(
            "RELEASE",
            tr("Release"),
            tr("Hexagons, or merged hexagons, with what may be published."),
        )
        self.add_polygon_output(
            "TOTALS_OUT",
            tr("Published totals"),
            tr("The totals that go with the release; no others may be published."),
            optional=True,
        )
        self.add_polygon_output(
            "CUSTODIAN",
            tr("For the custodian (not for release)"),
            tr("True figures and reasons of every hexagon. Confidential."),
            optional=True,
        )
        self.add_report()
        self.add_numbers(
            HEXAGON_SIZE_USED=tr("Hexagon size used (m)"),
            CELLS_RELEASED=tr("Hexagons released on their own"),
            CELLS_MERGED=tr("Hexagons released in merged zones"),
            CELLS_WITHHELD=tr("Hexagons withheld, empty ones among them"),
            RECORDS_RELEASED=tr("Records in hexagons released on their own (confidential)"),
            RECORDS_MERGED=tr("Records in merged zones (confidential)"),
            RECORDS_WITHHELD=tr("Records in withheld hexagons (confidential)"),
            HELLINGER=tr("Hellinger distance to the true counts (confidential)"),
            RANK_CORRELATION=tr("Rank correlation with the true counts (confidential)"),
        )

    def _add_records(self):
        self.add_points("RECORDS", tr("Records"), tr("One point for each confidential record."))
        self.add_field(
            "CONTRIBUTOR",
            tr("Contributor"),
            "RECORDS",
            tr(
                "Who is protected, such as the person or the household. Empty: every record is a "
                "contributor of its own."
            ),
            numeric=False,
        )
        self.add_field(
            "NUMERATOR",
            tr("Numerator of a share"),
            "RECORDS",
            tr("What is released as a share of the count: 1 or 0, or a number up to the weight."),
        )
        self.add_field(
            "WEIGHT",
            tr("Weight"),
            "RECORDS",
            tr("What a record contributes. Empty: 1 each."),
        )
        self.add_boundary(
            tr(
                "Study area, public. Hexagons that meet it are released; records outside are left "
                "out. Empty: the rectangle around the published hexagons."
            )
        )
        self.add_polygons(
            "REGIONS",
            tr("Regions"),
            tr("Polygons whose totals are published too, such as official zones."),
            optional=True,
        )
        self.add_field(
            "REGION_NAME",
            tr("Name of a region"),
            "REGIONS",
            tr("Carried to the published totals."),
            numeric=False,
            advanced=True,
        )
        self.add_choice(
            "TOTALS",
            tr("Totals that are published besides"),
            TOTALS,
            tr("Say what a reader will have: a withheld hexagon must not be had by subtraction."),
        )
        self.add_flag(
            "TOTALS_STAND",
            tr("These totals are public already"),
            tr("Then they cannot be withheld, and the run is refused where they give away."),
            advanced=True,
        )

    def _add_rules(self):
        self.add_length(
            "HEXAGON_SIZE",
            tr("Hexagon size"),
            tr(
                "Distance between the centres of neighbouring hexagons. Empty: a round size that "
                "holds four times the least count on average."
            ),
        )
        self.add_choice(
            "ORIENTATION",
            tr("Orientation"),
            ORIENTATIONS,
            tr("Which way a corner of the hexagons points."),
            advanced=True,
        )
        self.add_number(
            "LEAST_COUNT",
            tr("Least count"),
            tr("Fewest distinct contributors behind a figure. In use: 3, 5, 10 and more."),
            default=10,
            least=1,
            whole=True,
        )
        self.add_number(
            "DOMINANCE_N",
            tr("Dominance: number of largest contributors"),
            tr("A total is unsafe when so many contributors hold more than the share. 0: off."),
            default=0,
            least=0,
            whole=True,
            advanced=True,
        )
        self.add_number(
            "DOMINANCE_SHARE",
            tr("Dominance: largest share (%)"),
            tr("Keep it secret: it helps to estimate a large contribution."),
            default=85.0,
            least=0.0,
            most=100.0,
            advanced=True,
        )
        self.add_number(
            "P_PERCENT",
            tr("p % rule"),
            tr(
                "A total is unsafe when it lets the second largest contributor estimate the "
                "largest to within so many per cent. 0: off. Keep it secret."
            ),
            default=0.0,
            least=0.0,
            advanced=True,
        )
        self.add_flag(
            "NONE_IS_GROUP",
            tr("A share of none is unsafe too"),
            tr("A share of all always is: it tells the answer of everybody in the hexagon."),
            advanced=True,
        )

    def _add_method(self):
        self.add_choice("METHOD", tr("Method"), METHODS, tr("What is done about unsafe hexagons."))
        self.add_flag(
            "SHOW_EMPTY",
            tr("Show empty hexagons as 0"),
            tr(
                "Then a withheld hexagon is known to hold somebody, which can give a lone house "
                "away. Off: empty hexagons look like withheld ones. Concerns withholding, merging."
            ),
            advanced=True,
        )
        self.add_number(
            "MERGE_REACH",
            tr("Farthest reach of a merged zone (hexagons)"),
            tr("Largest distance between two hexagons of a zone; what stays unsafe is withheld."),
            default=5,
            least=1,
            whole=True,
            advanced=True,
        )
        self.add_number(
            "ROUNDING_BASE",
            tr("Rounding base"),
            tr("Of rounding only, not below the least count. 0: the least count."),
            default=0,
            least=0,
            whole=True,
        )
        self.add_number(
            "EPSILON",
            tr("Privacy budget (epsilon)"),
            tr(
                "Of noise: how much more likely one person's records may make any outcome, as "
                "exp(epsilon). Budgets of several releases add up."
            ),
            default=1.0,
            least=0.0,
        )
        self.add_number(
            "CONTRIBUTION_LIMIT",
            tr("Records of one contributor that noise hides"),
            tr("More are left out at random; twice the limit needs twice the noise."),
            default=1,
            least=1,
            whole=True,
            advanced=True,
        )
        self.add_flag(
            "NO_NEGATIVES",
            tr("Lift negative noisy counts to 0"),
            tr("Easier to read, but sums over many hexagons come out too large."),
            advanced=True,
        )

    def work(self, job):
        study = prepare(job)
        made = release(
            study.records, study.q, study.r, len(study.regions), study.plan,
            part(job.progress, 0.15, 0.9), study.apart(),
        )  # fmt: skip
        shown = zones_to_show(study, made, job.working.metres)
        polygons = hexagons.hexagon_polygons(study.q, study.r, study.size, study.orientation)
        shapes = zone_polygons(polygons, made.zones, len(made.unsafe))
        if study.plan.method == NOISE and study.plan.seed is not None:
            job.warn(tr("A seed was given: the noise can be repeated. Rehearsal, not for release."))
        write_release(job, study, made, shown, shapes)
        write_totals(job, study, made)
        write_custodian(job, study, made, shapes)
        loss = give_numbers(job, study, made, shown)
        write_page(self, job, study, made, shown, shapes, loss)


def zones_to_show(study, made, metres):
    """Zones that go into the release, in the order of the tiling; metres: in a unit of the CRS.

    Without a given area it is the rectangle of hexagons around the published ones: the outline of
    the records themselves would show where the outermost lie.
    """
    zones = np.arange(len(made.unsafe))
    if study.area is not None:
        return zones
    count = made.count()
    safe = ~made.unsafe & (made.behind.whole.records > 0) & np.isfinite(count)
    public = np.isfinite(count) & (count > 0 if study.plan.method == ROUND else safe)
    if not public.any():
        raise InputError(
            tr(
                "No hexagon of {} m can be published on its own; choose larger hexagons, or give "
                "the boundary."
            ).format(number(study.size * metres))
        )
    kept = study.around(public[made.zones])
    whole = np.bincount(made.zones, kept) == np.bincount(made.zones)
    return zones[whole | public]


def give_numbers(job, study, made, shown):
    """Number outputs; returns (Hellinger distance, rank correlation)."""
    sizes = np.bincount(made.zones)
    out = np.ones(len(sizes), bool)
    out[shown] = False
    withheld = made.withheld | out
    merged = ~withheld & (sizes > 1)
    alone = ~withheld & (sizes == 1)
    records = made.behind.whole.records
    for name, which in (("RELEASED", alone), ("MERGED", merged), ("WITHHELD", withheld)):
        job.give(f"CELLS_{name}", int(sizes[which & ~out].sum()))
        job.give(f"RECORDS_{name}", int(records[which].sum()))
    job.give("HEXAGON_SIZE_USED", study.size * job.working.metres)
    weights = study.records.weights
    inside = study.records.cells >= 0
    true = np.bincount(
        study.records.cells[inside], None if weights is None else weights[inside], len(study.q)
    )
    readable = (np.where(withheld, 0.0, made.count()) / sizes)[made.zones]
    occupied = (true > 0) | (readable > 0)
    loss = hellinger_distance(true, readable), rank_correlation(true[occupied], readable[occupied])
    job.give("HELLINGER", loss[0])
    job.give("RANK_CORRELATION", loss[1])
    if study.plan.method == WITHHOLD and made.complementary.any():
        job.inform(
            tr("{} hexagons were withheld to protect others (confidential).").format(
                number(made.complementary.sum())
            )
        )
    return loss
