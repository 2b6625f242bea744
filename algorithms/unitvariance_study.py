"""From the layers of a unit variance run to its simulated zonings."""

from dataclasses import dataclass

import numpy as np

from ..plugin.text import number, said, tr
from .numeric import zones
from .numeric.errors import InputError
from .numeric.growth import check_zone_count
from .numeric.official import STRADDLES, pieces_of, zones_from_codes, zones_from_polygons
from .numeric.progress import part
from .numeric.scenarios import problem
from .numeric.variance import RATE, SHARE
from .numeric.zone_results import Simulation
from .zoning_pages import statistic_words
from .zoning_units import BUILDERS, Rate, Units, place_of_work, read_rate, read_units, zone_counts

KINDS = {
    "": tr("As the numbers say: members unless a count exceeds its total"),
    SHARE: tr("Members of the total: a share"),
    RATE: tr("Events that may repeat: a rate"),
}
STATISTICS = {
    key: words for key, words in statistic_words().items() if key not in ("zones", "events_reached")
}
MOST_MEMORY = 2e9


@dataclass(frozen=True)
class Study:
    """All that a run has settled on.

    Attributes
    ----------
    units : Units
    rate : Rate
    labels : (units,) list of str, what units are called
    official_names : list of str, of the official zones, empty without
    straddling : (units,) bool array, units that lie across an official line
    run : Simulation
    """

    units: Units
    rate: Rate
    labels: list
    official_names: list
    straddling: np.ndarray
    run: Simulation

    def shown(self, values):
        """Core values in the unit shown, none where a unit has no count or total."""
        return np.where(self.rate.missing, np.nan, np.asarray(values, float) * self.rate.factor)

    @property
    def threshold(self):
        return self.run.problem.threshold * self.rate.factor

    @property
    def overall(self):
        return self.run.problem.overall * self.rate.factor

    def verdicts(self):
        """Verdict of every unit, NaN without a value."""
        return np.where(self.rate.missing, np.nan, self.run.verdicts())

    def share_with(self, code):
        """Share of the total in units with a verdict."""
        totals = self.rate.totals
        return float(totals[self.verdicts() == code].sum() / totals.sum())


def examine(job):
    """Read the layers, simulate the zonings and put together what was found.

    Returns
    -------
    Study
    """
    units = read_units(job)
    rate = read_rate(job, units, "COUNT", "TOTAL")
    official, names, straddling = read_official(job, units)
    counts = zone_counts(job, units)
    generator = np.random.default_rng(np.random.SeedSequence(job.seed(), spawn_key=(1,)))
    threshold = job.real("THRESHOLD")
    setting = problem(
        units.graph,
        rate.counts,
        rate.totals,
        kind=job.choice("KIND", KINDS) or None,
        threshold=None if threshold is None else threshold / rate.factor,
        budget=job.real("BUDGET"),
        generator=generator,
    )
    say_above_totals(job, setting)
    builder = job.choice("BUILDER", BUILDERS)
    settings = (generator, job.real("LEAST_TOTAL"), job.real("BALANCE_TOLERANCE"))
    plan = zones.recipes(setting, builder, counts, *settings, part(job.progress, 0.1, 0.14))
    reference = None
    if official is not None and len(names) not in counts:
        reference = reference_recipe(job, setting, builder, len(names), settings)
    replicates = job.whole("REPLICATES")
    check_memory(job, units.graph.units, replicates, len(plan))
    with place_of_work(job) as executor:
        run = zones.simulate(
            setting,
            plan,
            replicates,
            job.seed(),
            official=official,
            reference=reference,
            statistic=job.choice("STATISTIC", STATISTICS),
            executor=executor,
            progress=part(job.progress, 0.15, 0.9),
        )
    say_kept_least(job, run)
    return Study(units, rate, labels_of(job, units), names, straddling, run)


def read_official(job, units):
    """(labels or None, names of the zones, units that straddle)."""
    straddling = np.zeros(units.graph.units, bool)
    field, layer = job.field("OFFICIAL"), job.given("OFFICIAL_ZONES")
    if field and layer:
        raise InputError(
            tr("{} and {}: give one of the two.").format(
                job.label("OFFICIAL"), job.label("OFFICIAL_ZONES")
            )
        )
    if not field and not layer:
        return None, [], straddling
    if field:
        labels, names = zones_from_codes(units.values[field])
        name = job.label("OFFICIAL")
        if not names:
            raise InputError(tr("{}: no unit has a value.").format(name))
    else:
        labels, share = zones_from_polygons(units.polygons, job.polygons("OFFICIAL_ZONES").geometry)
        names = [str(zone + 1) for zone in range(int(labels.max()) + 1)]
        name = job.label("OFFICIAL_ZONES")
        straddling = (labels >= 0) & (share < STRADDLES)
        if straddling.any():
            job.warn(
                tr(
                    "{}: {} units lie across a line of the official zoning; each went to the zone "
                    "with most of its area (see the field straddles)."
                ).format(name, number(straddling.sum()))
            )
    outside = int((labels < 0).sum())
    if outside:
        job.warn(
            tr("{}: {} units are in no official zone and left out of its statistics.").format(
                name, number(outside)
            )
        )
    broken = int((pieces_of(units.whole_graph, labels) > 1).sum())
    if broken:
        job.warn(
            tr("{}: {} of its zones are in more than one piece; simulated zones never are.").format(
                name, number(broken)
            )
        )
    return labels, names, straddling


def reference_recipe(job, setting, builder, many, settings):
    """How to make zonings as numerous as the official one; None, and said, where none can be."""
    try:
        check_zone_count(setting.graph, many)
        return zones.recipes(setting, builder, [many], *settings)[0]
    except InputError as error:
        job.warn(tr("The official zoning has nothing to be compared with. {}").format(said(error)))
        return None


def say_above_totals(job, setting):
    """Warn of counts above their totals, which no share can be; refuse where a share was asked."""
    above = int(((setting.counts > setting.totals) & (setting.totals > 0)).sum())
    if not above or not job.field("TOTAL"):
        return
    words = tr("{}: {} units have a count above their total").format(
        job.label("COUNT"), number(above)
    )
    if setting.kind == SHARE:
        raise InputError(
            tr("{}, so they cannot be members of it; correct the fields or choose “{}”.").format(
                words, KINDS[RATE]
            )
        )
    job.warn(tr("{}; the value is taken for a rate of events that may repeat.").format(words))


def say_kept_least(job, run):
    """Warn where a least total made fewer zones than asked."""
    least = job.real("LEAST_TOTAL")
    if least is None:
        return
    column = run.problem.statistic_names().index("zones")
    for scale in run.scales:
        made = float(np.mean(scale.statistics[:, column]))
        if made < 0.8 * scale.recipe.zone_count:
            job.warn(
                tr("{}: with {} to a zone at least, {} zones come out as {} on average.").format(
                    job.label("LEAST_TOTAL"),
                    number(least),
                    number(scale.recipe.zone_count),
                    number(made),
                )
            )


def check_memory(job, units, replicates, scales):
    """Refuse what would not fit, and say what would."""
    fixed = zones.bytes_for(units, 0, scales)
    a_zoning = (zones.bytes_for(units, 1000, scales) - fixed) / 1000
    if fixed + a_zoning * replicates > MOST_MEMORY:
        raise InputError(
            tr("{}: the table of {} zonings would need {} GB; choose {} or fewer.").format(
                job.label("REPLICATES"),
                number(replicates * scales),
                number((fixed + a_zoning * replicates) / 1e9),
                number(max(2, (MOST_MEMORY - fixed) // a_zoning)),
            )
        )


def labels_of(job, units):
    """What units are called: a field's text, or the feature id."""
    field = job.field("LABEL")
    names = units.ids if field is None else units.values[field]
    return [
        str(identifier) if name is None or name != name else str(name)
        for name, identifier in zip(names, units.ids)
    ]
