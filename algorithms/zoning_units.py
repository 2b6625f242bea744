"""What the algorithms over base units share: parameters, reading, and where the batches run."""

from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np

from ..plugin import layers
from ..plugin.text import listed, number, percent, said, tr
from .numeric import workers
from .numeric.builders import BALANCED, GROWN, TREE_CUT
from .numeric.contiguity import Contiguity, contiguity, repaired_polygons
from .numeric.errors import InputError
from .numeric.progress import part

BUILDERS = {
    GROWN: tr("Grown: from random seeds until they meet"),
    TREE_CUT: tr("Tree-cut: random trees cut so that each zone holds a least total"),
    BALANCED: tr("Balanced: nearly equal totals"),
}


@dataclass(frozen=True)
class Units:
    """Base units in the working CRS.

    Attributes
    ----------
    polygons : (units,) array of valid shapely polygons
    values : dict of str to (units,) array
        Every field of the layer.
    ids : (units,) int array
    graph : Contiguity
        Without the pairs that KEEP_WITHIN separates.
    whole_graph : Contiguity
        With them.
    """

    polygons: np.ndarray
    values: dict
    ids: np.ndarray
    graph: Contiguity
    whole_graph: Contiguity


@dataclass(frozen=True)
class Rate:
    """Counts over totals and how their quotient is shown.

    Attributes
    ----------
    counts, totals : (units,) arrays
    missing : (units,) bool array
        Units without a count or total; both are 0 there.
    factor : float
        From the core's value to the unit shown.
    unit : str
    """

    counts: np.ndarray
    totals: np.ndarray
    missing: np.ndarray
    factor: float
    unit: str


def add_units(algorithm, help):
    """Add UNITS."""
    algorithm.add_polygons("UNITS", tr("Base units"), help)


def add_zones(algorithm, replicates):
    """Add how zones are made."""
    algorithm.add_text(
        "ZONE_COUNTS",
        tr("Numbers of zones"),
        tr(
            "How many zones the units are grouped into, apart by commas; each number is a scale. "
            "Empty: five numbers from about a thirtieth to a quarter of the units."
        ),
    )
    algorithm.add_choice(
        "BUILDER",
        tr("How zones are made"),
        BUILDERS,
        tr(
            "Every zone is one connected piece and every unit is in one zone. Grown zones differ "
            "in size as natural areas do; tree-cut zones hold a least total; balanced zones hold "
            "nearly the same, which takes longer."
        ),
    )
    algorithm.add_number(
        "REPLICATES",
        tr("Zonings of each number"),
        tr("More make the figures steadier; the time grows in proportion."),
        default=replicates,
        least=2,
        most=5_000_000,
        whole=True,
    )
    algorithm.add_number(
        "LEAST_TOTAL",
        tr("Least total of a zone"),
        tr("Tree-cut only: every zone holds at least this much of the total."),
        least=0.0,
        optional=True,
        advanced=True,
    )
    algorithm.add_field(
        "KEEP_WITHIN",
        tr("Keep zones within"),
        "UNITS",
        tr("No zone crosses from one value of this field to another, such as a county line."),
        numeric=False,
        advanced=True,
    )
    algorithm.add_number(
        "BALANCE_TOLERANCE",
        tr("Balance tolerance"),
        tr("Balanced only: how far a zone may be from an equal share, as a part of that share."),
        default=0.2,
        least=0.0,
        most=1.0,
        advanced=True,
    )
    algorithm.add_length(
        "BORDER_TOLERANCE",
        tr("Border tolerance"),
        tr(
            "Borders that run this close to each other count as shared, where the digitising left "
            "slivers or gaps. Empty: a thousandth of the width of a middling unit."
        ),
        advanced=True,
    )


def add_scheduler(algorithm):
    """Add SCHEDULER, for those who have one."""
    algorithm.add_text(
        "SCHEDULER",
        tr("Dask scheduler address"),
        tr(
            "Such as tcp://host:8786: the zonings are made by the workers of that scheduler, with "
            "the same result to the bit. Needs the Python package distributed. The counts travel "
            "to it unencrypted unless the address says otherwise. Empty: this machine."
        ),
        advanced=True,
    )


def read_units(job):
    """Read UNITS with all fields and find which share a border; every finding is a warning.

    Returns
    -------
    Units
    """
    source = job.algorithm.parameterAsSource(job.parameters, "UNITS", job.context)
    names = [] if source is None else source.fields().names()
    found = job.polygons("UNITS", names)
    tolerance = job.length("BORDER_TOLERANCE") or None
    polygons, _ = repaired_polygons(found.geometry)
    graph = contiguity(found.geometry, tolerance, progress=part(job.progress, 0.02, 0.1))
    for sentence in graph.findings.sentences():
        job.warn(f"{job.label('UNITS')}: {said(sentence)}")
    inside = graph
    within = job.field("KEEP_WITHIN")
    if within:
        groups, nulls = as_groups(found.values[within])
        if nulls:
            job.warn(
                tr("{}: {} units have no value; they form a group of their own.").format(
                    job.label("KEEP_WITHIN"), number(nulls)
                )
            )
        inside = graph.within(groups)
    return Units(polygons, found.values, found.ids, inside, graph)


def as_groups(values):
    """Group numbers of any field's values, and how many are null."""
    null = np.array([value is None or value != value for value in values], bool)
    text = np.array(["" if gone else f"={value}" for value, gone in zip(values, null)])
    return np.unique(text, return_inverse=True)[1].reshape(-1), int(null.sum())


def read_rate(job, units, count, total):
    """Counts and totals of two field parameters; what cannot be used counts for nothing.

    Parameters
    ----------
    job : Job
    units : Units
    count, total : str
        Names of the parameters; without a total field values are taken per square kilometre.

    Returns
    -------
    Rate
    """
    counts, bad = _usable(job, units, count)
    if job.field(total):
        totals, bad_totals = _usable(job, units, total)
        factor, unit = 1000.0, tr("per 1000")
    else:
        kilometre = job.working.metres / 1000
        totals = np.array([polygon.area for polygon in units.polygons]) * kilometre**2
        bad_totals = np.zeros(len(totals), bool)
        factor, unit = 1.0, tr("per km²")
    missing = bad | bad_totals
    counts, totals = np.where(missing, 0.0, counts), np.where(missing, 0.0, totals)
    stranded = (totals == 0) & (counts > 0)
    if stranded.any():
        job.warn(
            tr(
                "{}: {} units with a count have a total of 0; their counts go into their zones."
            ).format(job.label(total), number(stranded.sum()))
        )
    return Rate(counts, totals, missing, factor, unit)


def _usable(job, units, name):
    """A field's values, and where they are null or negative, which is said."""
    values = layers.as_floats(units.values[job.field(name)])
    null, negative = ~np.isfinite(values), values < 0
    for bad, words in (
        (null, tr("{}: {} units have no number; they count for nothing and get no value.")),
        (negative, tr("{}: {} units are below 0; they count for nothing and get no value.")),
    ):
        if bad.any():
            job.warn(words.format(job.label(name), number(bad.sum())))
    bad = null | negative
    if bad.all():
        raise InputError(
            tr("{}: no unit has a usable number; choose another field.").format(job.label(name))
        )
    return np.where(bad, 0.0, values), bad


def zone_counts(job, units):
    """The numbers of zones asked for, or chosen and said."""
    asked = job.numbers("ZONE_COUNTS")
    if asked:
        odd = [value for value in asked if value != int(value) or value < 1]
        if odd:
            raise InputError(
                tr("{}: whole numbers above 0 are expected; found {}.").format(
                    job.label("ZONE_COUNTS"), listed(f"{value:g}" for value in odd)
                )
            )
        return sorted({int(value) for value in asked})
    many = units.graph.units
    parts = units.graph.components()[0]
    low = max(3, parts, round(many / 30))
    high = max(low, many // 4)
    chosen = sorted({min(round(value), many) for value in np.geomspace(low, high, 5)})
    job.inform(tr("Numbers of zones chosen: {}").format(", ".join(map(str, chosen))))
    return chosen


def builder_words(job):
    """How the zones were made, with sources."""
    return {
        "grown": tr(
            "Zones grow from random seeds along random passage times until they meet "
            "(first-passage growth: Eden 1961; Hammersley & Welsh 1965)."
        ),
        "tree-cut": tr(
            "A random spanning tree (the minimum tree of random costs) is cut from its leaves up "
            "as soon as a subtree holds a least total, chosen so that the asked number of zones "
            "comes about on average; the remainder joins the smallest zone beside it."
        ),
        "balanced": tr(
            "Regions are cut in two along random spanning trees until all zones hold an equal "
            "share of the total within {} (after DeFord, Duchin & Solomon 2021, Harvard Data "
            "Science Review 3.1)."
        ).format(percent(job.real("BALANCE_TOLERANCE"), 0)),
    }[job.choice("BUILDER", BUILDERS)]


@contextmanager
def place_of_work(job):
    """Where the batches run: a scheduler's workers, or what gains on this machine."""
    address = job.words("SCHEDULER")
    if not address:
        yield workers.local_workers
        return
    executor = workers.SchedulerExecutor(address)
    job.inform(tr("The zonings are made by the workers of the scheduler."))
    try:
        yield executor
    finally:
        executor.shutdown(wait=False)
