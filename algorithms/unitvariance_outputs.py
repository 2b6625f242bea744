"""The layers that a unit variance run writes."""

import numpy as np
import shapely

from ..plugin.outputs import ROW_NUMBERS, Column, kept_columns
from ..plugin.text import percent, tr
from ..plugin.zoning_looks import extreme_zones
from .numeric.errors import InputError
from .unitvariance_study import STATISTICS
from .zoning_pages import VALUES, summaries, table_columns


def unit_columns(study):
    """The columns of UNITS_OUT: the layer's own fields, then what was found."""
    run, unit = study.run, study.rate.unit
    split = run.decomposition()
    p_above, evidence = run.above()
    known = ~study.rate.missing
    own = np.divide(
        study.rate.counts, study.rate.totals,
        out=np.full(len(known), np.nan), where=study.rate.totals > 0,
    )  # fmt: skip

    def of_unit(words):
        return f"{words} ({unit})"

    def float_column(name, values, alias):
        return Column(name, "float", np.where(known, values, np.nan), alias)

    found = [
        Column("value", "float", study.shown(own), of_unit(tr("Value of the unit alone"))),
        Column("mean", "float", study.shown(split.mean), of_unit(tr("Mean over all zonings"))),
    ]
    deviations = (
        ("sd_total", split.total, tr("Standard deviation over all zonings")),
        ("sd_scale", split.scale, tr("Standard deviation owed to the number of zones")),
        ("sd_zoning", split.zoning, tr("Standard deviation owed to where lines run")),
        ("sd_counting", split.counting, tr("Standard deviation of chance under one zoning")),
    )
    for name, values, words in deviations:
        found.append(Column(name, "float", study.shown(np.sqrt(values)), of_unit(words)))
    for share in (0.05, 0.5, 0.95):
        found.append(
            Column(
                f"q{100 * share:02.0f}",
                "float",
                study.shown(run.quantiles(share)),
                of_unit(tr("Quantile {} over all zonings").format(percent(share, 0))),
            )
        )
    found += [
        float_column("p_above", p_above, tr("Share of zonings above the threshold")),
        float_column("evidence", evidence, tr("Excess over the threshold in counting noise")),
        Column("verdict", "int", study.verdicts(), tr("1 holds above, -1 holds below, 0 neither")),
        float_column("rank_low", run.rank_quantiles(0.05), tr("Rank from (1: highest; 5 %)")),
        float_column("rank_high", run.rank_quantiles(0.95), tr("Rank to (95 %)")),
    ]
    if run.official is not None:
        names = [study.official_names[zone] if zone >= 0 else None for zone in run.official.labels]
        found.append(Column("official", "text", names, tr("Official zone")))
        found.append(
            Column("straddles", "int", study.straddling.astype(int), tr("1: across official lines"))
        )
    stored = study.units.values.items()
    stored = {name: column for name, column in stored if name.lower() not in ROW_NUMBERS}
    return [*kept_columns(stored, found, "_in"), *found]


def table_of(study):
    """The columns of TABLE, with the official zoning beside those as numerous."""
    run = study.run
    names = run.problem.statistic_names()
    scales = [*run.scales, *([] if run.reference is None else [run.reference])]
    rows, official, places = [], [], []
    for scale in sorted(scales, key=lambda scale: scale.recipe.zone_count):
        statistics = dict(zip(names, scale.statistics.T))
        for row in summaries(statistics, study.rate.factor):
            rows.append((scale.recipe.zone_count, scale.replicates, *row))
            beside = run.official
            same = beside is not None and beside.zone_count == scale.recipe.zone_count
            column = names.index(row[0])
            factor = study.rate.factor if row[0] in VALUES else 1.0
            official.append(beside.statistics[column] * factor if same else np.nan)
            places.append(beside.places[column] if same else np.nan)
    return [
        *table_columns(("zone_count", "int", tr("Number of zones")), rows, study.rate.unit),
        Column("official", "float", official, tr("Official zoning")),
        Column("official_place", "float", places, tr("Share of zonings below the official one")),
    ]


def write_extremes(job, study):
    """Write EXTREMES: the zones of the two most extreme zonings."""
    if not job.wanted("EXTREMES"):
        return
    run = study.run
    if run.largest is None:
        raise InputError(
            tr("{}: it is undefined in every zoning, so there is no extreme one.").format(
                job.label("STATISTIC")
            )
        )
    words = STATISTICS[run.statistic]
    factor = study.rate.factor if run.statistic in VALUES else 1.0
    rows, shapes = [], []
    for which, extreme in (("largest", run.largest), ("smallest", run.smallest)):
        for zone in range(int(extreme.labels.max()) + 1):
            inside = extreme.labels == zone
            count, total = study.rate.counts[inside].sum(), study.rate.totals[inside].sum()
            value = count / total * study.rate.factor if total > 0 else np.nan
            rows.append(
                (which, words, extreme.value * factor, zone + 1, inside.sum(), count, total, value)
            )
            shapes.append(shapely.union_all(study.units.polygons[inside]))
    columns = list(zip(*rows))
    layout = (
        ("extreme", "text", tr("Zoning with the … value of the statistic")),
        ("statistic", "text", tr("Statistic")),
        ("reached", "float", tr("Value of the statistic")),
        ("zone", "int", tr("Zone")),
        ("units", "int", tr("Units")),
        ("count", "float", tr("Count")),
        ("total", "float", tr("Total")),
        ("value", "float", tr("Value of the zone ({})").format(study.rate.unit)),
    )
    job.write_layer(
        "EXTREMES",
        [Column(name, kind, values, alias) for (name, kind, alias), values in zip(layout, columns)],
        np.array(shapes, object),
        "polygon",
        extreme_zones(np.array(columns[-1], float), study.rate.unit),
    )
