"""What a release in hexagons is made from: records, tiling, regions and the plan."""

from dataclasses import dataclass

import numpy as np
import shapely

from ..plugin.layers import as_floats, union_of
from ..plugin.text import number, tr
from .numeric import hexagons
from .numeric.disclosure import Rules, contributor_codes
from .numeric.errors import InputError
from .numeric.release_plan import CONTROLLED, MERGE, NOISE, ROUND, WITHHOLD, Plan, Records

METHODS = {
    WITHHOLD: tr("Withhold unsafe hexagons"),
    MERGE: tr("Merge unsafe hexagons with neighbours"),
    ROUND: tr("Round at random, each figure on its own"),
    CONTROLLED: tr("Round so that figures still add up"),
    NOISE: tr("Add noise with a privacy budget"),
}
ORIENTATIONS = {
    hexagons.POINTY: tr("A corner points north"),
    hexagons.FLAT: tr("A corner points east"),
}
TOTALS = {
    "auto": tr("The grand total, and region totals where regions are given"),
    "none": tr("None"),
    "grand": tr("The grand total only"),
    "regions": tr("Region totals only"),
    "both": tr("Region totals and the grand total"),
}
# mean number of contributors that a hexagon holds when the size is chosen
WANTED = 4
# sizes that tell little of the records, yet none is far above the one wanted
ROUND = np.array([1.0, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0])
MOST_CELLS = 200_000


@dataclass(frozen=True)
class Study:
    """Everything settled before the release is made; lengths in units of the working CRS.

    Attributes
    ----------
    records : numeric.release_plan.Records
    plan : numeric.release_plan.Plan
    size : float
    orientation : str
    q, r : (cells,) int arrays
    area : shapely geometry or None
        Study area; None where it was not given.
    regions : (k,) array of shapely geometries
    region_names : list of str
    chosen : bool
        Whether the size was chosen from the data.
    """

    records: Records
    plan: Plan
    size: float
    orientation: str
    q: np.ndarray
    r: np.ndarray
    area: object
    regions: np.ndarray
    region_names: list
    chosen: bool

    def around(self, cells):
        """Cells in the upright rectangle around some cells."""
        across = 2 * self.q + self.r if self.orientation == hexagons.POINTY else self.q
        up = self.r if self.orientation == hexagons.POINTY else 2 * self.r + self.q
        kept = np.ones(len(self.q), bool)
        for place in (across, up):
            some = place[cells]
            kept &= (place >= some.min()) & (place <= some.max())
        return kept

    def apart(self):
        """Cells that may not be merged: without an area those outside what is safe by itself.

        A zone that reached for the outermost records would show where they lie.
        """
        if self.area is not None:
            return None
        cells = np.arange(len(self.q))
        behind = self.records.behind(cells, len(cells), self.plan.rules)
        safe = ~behind.unsafe & (behind.whole.records > 0)
        return ~self.around(safe) if safe.any() else np.ones(len(cells), bool)


def prepare(job):
    """Read the layers and settle plan and tiling.

    Returns
    -------
    Study
    """
    fields = [name for name in (job.field("CONTRIBUTOR"), job.field("NUMERATOR")) if name]
    found = job.records("RECORDS", weight="WEIGHT", fields=fields)
    regions, region_names = read_regions(job)
    area = job.boundary()
    if area is None and len(regions):
        area = shapely.union_all(regions)
    kept, numerator = usable(job, found, area)
    contributors = contributors_of(job, found, kept)
    plan = plan_of(job, len(regions) > 0, area is not None)
    x, y = found.x[kept], found.y[kept]
    size, chosen = size_of(job, x, y, area, plan)
    orientation = job.choice("ORIENTATION", ORIENTATIONS)
    ground = area if area is not None else shapely.box(x.min(), y.min(), x.max(), y.max())
    if ground.area < hexagons.hexagon_area(size):
        raise InputError(
            tr("{}: a hexagon of {} m is larger than the area; choose a smaller size.").format(
                job.label("HEXAGON_SIZE"), number(size * job.working.metres)
            )
        )
    left, bottom, right, top = ground.bounds
    cells = ((right - left) / size + 4) * ((top - bottom) / (0.866 * size) + 4)
    job.check_cells("HEXAGON_SIZE", size, cells, MOST_CELLS)
    if area is None:
        # a rectangle of hexagons must not lack a corner that the records' own rectangle misses
        ground = shapely.box(x.min() - size, y.min() - size, x.max() + size, y.max() + size)
    q, r = hexagons.cells_covering(ground, size, orientation=orientation, most=MOST_CELLS)
    records = Records(
        cells_of(q, r, *hexagons.hexagon_cells(x, y, size, orientation)),
        found.weight[kept] if job.field("WEIGHT") else None,
        numerator,
        contributors,
        regions_of(job, regions, x, y) if len(regions) else None,
    )
    return Study(records, plan, size, orientation, q, r, area, regions, region_names, chosen)


def usable(job, found, area):
    """Records inside the area with a known numerator, and their numerators."""
    kept = np.ones(len(found), bool)
    if area is not None:
        shapely.prepare(area)
        kept = shapely.intersects_xy(area, found.x, found.y)
        if not kept.all():
            job.warn(tr("{} records outside the area were left out.").format(number((~kept).sum())))
    numerator = None
    if job.field("NUMERATOR"):
        numerator = as_floats(found.values[job.field("NUMERATOR")])
        missing = kept & ~np.isfinite(numerator)
        if missing.any():
            job.warn(
                tr("{}: {} records with no value were left out.").format(
                    job.label("NUMERATOR"), number(missing.sum())
                )
            )
        kept &= ~missing
        numerator = numerator[kept]
    if not kept.any():
        raise InputError(
            tr("{}: no usable record lies in the area; check boundary, regions and CRS.").format(
                job.label("RECORDS")
            )
        )
    return kept, numerator


def contributors_of(job, found, kept):
    """Codes of the contributors, None where each record is one."""
    name = job.field("CONTRIBUTOR")
    if name is None:
        return None
    codes = contributor_codes(found.values[name][kept])
    unknown = int((codes < 0).sum())
    if unknown:
        job.warn(
            tr(
                "{}: {} records name no contributor. They are counted, but protect nobody: "
                "hexagons are judged as if all of them were the largest contributor's."
            ).format(job.label("CONTRIBUTOR"), number(unknown))
        )
    return codes


def read_regions(job):
    """Regions as valid geometries that do not overlap, and their names."""
    if not job.given("REGIONS"):
        return np.empty(0, object), []
    name = job.field("REGION_NAME")
    found = job.polygons("REGIONS", fields=[name] if name else [])
    shapes = shapely.make_valid(found.geometry)
    whole = union_of(found)
    together, apart = whole.area, float(shapely.area(shapes).sum())
    if apart - together > 1e-6 * together:
        raise InputError(
            tr(
                "{}: the polygons overlap by {} km²; records there would count in several totals. "
                "Repair the layer, or choose regions that do not overlap."
            ).format(
                job.label("REGIONS"),
                number((apart - together) * job.working.square_kilometres),
            )
        )
    names = [str(value) for value in found.values[name]] if name else None
    return shapes, names or [str(place + 1) for place in range(len(shapes))]


def regions_of(job, regions, x, y):
    """Region of each record, -1 for none; a record on a border belongs to the first."""
    tree = shapely.STRtree(regions)
    record, region = tree.query(shapely.points(x, y), predicate="intersects")
    result = np.full(len(x), len(regions))
    np.minimum.at(result, record, region)
    outside = int((result == len(regions)).sum())
    if outside:
        job.warn(
            tr("{}: {} records lie in no region and count in no region total.").format(
                job.label("REGIONS"), number(outside)
            )
        )
    return np.where(result == len(regions), -1, result)


def cells_of(q, r, record_q, record_r):
    """Number of each record's cell in the tiling, -1 where it has none."""
    least, wide = r.min(), int(q.max() - q.min()) + 1
    key = (r - least) * wide + (q - q.min())
    order = np.argsort(key, kind="stable")
    inside = (record_q >= q.min()) & (record_q <= q.max())
    wanted = (record_r - least) * wide + (record_q - q.min())
    place = np.minimum(np.searchsorted(key[order], wanted), len(key) - 1)
    inside &= key[order][place] == wanted
    return np.where(inside, order[place], -1)


def plan_of(job, has_regions, has_area):
    """The plan as asked for."""
    rules = Rules(
        job.whole("LEAST_COUNT"),
        job.whole("DOMINANCE_N"),
        job.real("DOMINANCE_SHARE"),
        job.real("P_PERCENT"),
        job.flag("NONE_IS_GROUP"),
    )
    if rules.least_count == 2:
        job.warn(
            tr("With a least count of 2 each of two contributors can work out the other's figure.")
        )
    method = job.choice("METHOD", METHODS)
    if method == NOISE and not has_area:
        raise InputError(
            tr(
                "{}: noise needs a boundary or regions, because the outline of the records would "
                "show where they lie."
            ).format(job.label("BOUNDARY"))
        )
    totals = job.choice("TOTALS", TOTALS)
    if totals == "auto" and method == NOISE:
        totals = "none"
    asked = {"auto": (has_regions, True), "none": (False, False), "grand": (False, True)}
    region_totals, grand_total = asked.get(totals, (True, totals == "both"))
    if region_totals and not has_regions:
        raise InputError(
            tr("{}: region totals are published, but no regions are given.").format(
                job.label("REGIONS")
            )
        )
    return Plan(
        method=method,
        rules=rules,
        region_totals=region_totals,
        grand_total=grand_total,
        totals_stand=job.flag("TOTALS_STAND"),
        show_empty=job.flag("SHOW_EMPTY"),
        base=job.whole("ROUNDING_BASE") or rules.least_count,
        epsilon=job.real("EPSILON"),
        contribution_limit=job.whole("CONTRIBUTION_LIMIT"),
        clip=job.flag("NO_NEGATIVES"),
        reach=job.whole("MERGE_REACH"),
        seed=job.whole("SEED"),
    )


def size_of(job, x, y, area, plan):
    """The size asked for, or a round one that holds some times the least count on average."""
    asked = job.length("HEXAGON_SIZE")
    if asked > 0:
        return asked, False
    if plan.method == NOISE:
        raise InputError(
            tr("{}: noise needs a size that was chosen without looking at the records.").format(
                job.label("HEXAGON_SIZE")
            )
        )
    ground = area.area if area is not None else float(np.ptp(x)) * float(np.ptp(y))
    wanted = np.sqrt(ground * WANTED * plan.rules.least_count / len(x) * 2 / np.sqrt(3))
    metres = max(wanted * job.working.metres, 1.0)
    steps = ROUND * 10.0 ** np.floor(np.log10(metres))
    chosen = float(steps[steps >= metres * (1 - 1e-9)][0])
    job.inform(tr("Hexagon size chosen: {} m").format(number(chosen)))
    return chosen / job.working.metres, True
