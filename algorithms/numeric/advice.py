"""One advised bandwidth, with the reason and what in the records stands against it."""

import math
from dataclasses import dataclass

import numpy as np
import shapely
from scipy.spatial import cKDTree

from . import bandwidth
from .coordinate_lattice import lattice_spacing
from .crossvalidation import least_squares_scores, likelihood_scores
from .errors import InputError
from .pairsums import narrowest_bandwidth, record_spectrum
from .progress import part, silent
from .words import Words, joined

BANDWIDTHS = 60
NARROWEST = 40  # the normal scale over the narrowest bandwidth that is examined
# Cross-validation from fewer records than these is erratic (common practice, no source)
FEWEST_RECORDS, FEW_RECORDS = 30, 100
# Share of stacked pairs per record above which a minimum is no longer trusted. With Gaussian
# kernels in the plane the score falls without limit from 1/3 on (Silverman 1986, section 3.4.3)
STACKED_PAIRS = 0.2
STACKED_RECORDS = 0.2
AGREEMENT = 2.0
NEAR_BOUNDARY = 0.1
LEAST_SQUARES, LIKELIHOOD = Words("least-squares"), Words("likelihood")
SAMPLE = 20_000


@dataclass(frozen=True)
class Diagnosis:
    """What the records are like, as far as it bears on a bandwidth.

    Attributes
    ----------
    records, places : int
        Records with weight, and different coordinates among them.
    effective : float
        (sum w)^2 / sum w^2.
    stacked : float
        Share of the records that have their coordinates in common with another.
    pairs : float
        Weight products of pairs on one place over the sum of squared weights; without weights
        the mean number of other records on a record's place.
    collapses : bool
        The least-squares score falls without limit as the bandwidth goes to 0.
    nearest : float
        Distance from which on three quarters of the places have their nearest other place, metres.
    rounding : float
        Spacing of the lattice that the coordinates were rounded to, metres; 0 where none is seen.
    outside : int
        Records outside the boundary, left out.
    """

    records: int
    places: int
    effective: float
    stacked: float
    pairs: float
    collapses: bool
    nearest: float
    rounding: float
    outside: int


@dataclass(frozen=True)
class Advice:
    """Bandwidths by four rules, the advised one and why.

    Attributes
    ----------
    normal_scale, oversmoothed : float
        Metres.
    least_squares, likelihood : float
        Metres; NaN where the curve has no best value inside the range.
    advised : float
        Metres.
    reason : str
        One sentence.
    warnings : tuple of str
        What a reader must know of the records, one sentence or two each.
    bandwidths : (m,) array
        Of the least-squares curve, metres.
    least_squares_curve : (m,) array
        Score, per square metre; small is good.
    likelihood_bandwidths : (k,) array
        Of the likelihood curve, metres: every second one, as each takes a surface of its own.
    likelihood_curve : (k,) array
        Mean log density, the density per square metre; large is good.
    near_boundary : float
        Share of the records within one advised bandwidth of the boundary; NaN without one.
    diagnosis : Diagnosis
    """

    normal_scale: float
    oversmoothed: float
    least_squares: float
    likelihood: float
    advised: float
    reason: str
    warnings: tuple
    bandwidths: np.ndarray
    least_squares_curve: np.ndarray
    likelihood_bandwidths: np.ndarray
    likelihood_curve: np.ndarray
    near_boundary: float
    diagnosis: Diagnosis


def advise(x, y, weights=None, boundary=None, progress=silent):
    """Work out bandwidths by four rules and advise one.

    The advised value is the geometric mean of the two cross-validated ones, and a rule of thumb
    when the records are too few, stacked or rounded for cross-validation. Least squares looks at
    the dense places, likelihood at the typical record; as overall bandwidth of a surface by the
    square-root law their mean came closest to the truth in simulations of six kinds of patterns
    (tests/bench/bench_bandwidth.py).

    Parameters
    ----------
    x, y : (n,) arrays
        Places in metres.
    weights : (n,) array, optional
        Not negative.
    boundary : shapely geometry, optional
        Study area in the same metres; records outside are left out.
    progress : callable

    Returns
    -------
    Advice

    Raises
    ------
    InputError
        No record with weight, or all on one place.
    """
    x, y, weights = bandwidth.checked_records(x, y, weights)
    x, y, weights, outside = _inside(x, y, weights, boundary)
    normal = bandwidth.normal_scale(x, y, weights)
    widest = bandwidth.oversmoothed(x, y, weights)
    diagnosis = diagnose(x, y, weights, normal, outside)
    progress(0.05)
    bandwidths = search_range(x, y, normal, widest, diagnosis)
    # neighbours on the ground next to each other in memory: three times as quick from here on
    order = np.lexsort((x, np.floor(y / bandwidths[0])))
    x, y, weights = x[order], y[order], weights[order]
    spectrum = record_spectrum(
        x, y, weights, bandwidths[0], bandwidths[-1], part(progress, 0.05, 0.2)
    )
    squares = least_squares_scores(x, y, bandwidths, weights, spectrum)
    fewer = bandwidths[1::2]
    likelihoods = likelihood_scores(x, y, fewer, weights, spectrum, part(progress, 0.2, 1.0))
    least_squares = best_inside(bandwidths, -squares)
    likelihood = best_inside(fewer, likelihoods)
    advised, reason = _choose(diagnosis, normal, widest, least_squares, likelihood)
    if advised > max(widest, diagnosis.rounding):
        advised = max(widest, diagnosis.rounding)
        reason = Words(
            "{} It is held at the oversmoothed value, the most that any density of this spread "
            "asks for.",
            reason,
        )
    near = _near_boundary(x, y, weights, boundary, advised)
    warnings = _warnings(diagnosis, advised, least_squares, likelihood, near)
    return Advice(
        normal,
        widest,
        least_squares,
        likelihood,
        advised,
        reason,
        tuple(warnings),
        bandwidths,
        squares,
        fewer,
        likelihoods,
        near,
        diagnosis,
    )


def diagnose(x, y, weights, normal, outside=0):
    """Count stacked records and look for rounded coordinates.

    Parameters
    ----------
    x, y, weights : (n,) arrays
    normal : float
        The normal-scale bandwidth; a lattice too fine to matter to it is not looked for.
    outside : int

    Returns
    -------
    Diagnosis
    """
    order = np.lexsort((y, x))
    starts = np.append(True, (np.diff(x[order]) != 0) | (np.diff(y[order]) != 0))
    place = np.cumsum(starts) - 1
    sizes = np.bincount(place)
    held = np.bincount(place, weights[order])
    squares = float((weights**2).sum())
    together = float((held**2).sum()) - squares
    total = float(weights.sum())
    apart = total**2 - squares
    place_x, place_y = x[order][starts], y[order][starts]
    nearest = nearest_distances(place_x, place_y)
    step = max(1, sizes.size // SAMPLE)
    return Diagnosis(
        records=x.size,
        places=sizes.size,
        effective=bandwidth.effective_size(weights),
        stacked=float(sizes[sizes > 1].sum() / x.size),
        pairs=together / squares,
        collapses=bool(together / apart > (squares + together) / (4 * total**2)),
        nearest=float(np.quantile(nearest, 0.25)),
        rounding=lattice_spacing(place_x[::step], place_y[::step], nearest, normal / NARROWEST),
        outside=outside,
    )


def nearest_distances(x, y):
    """Distance to the nearest other place from up to some 20,000 of different places."""
    places = np.column_stack([x - x.min(), y - y.min()])
    some = places[:: max(1, x.size // SAMPLE)]
    return cKDTree(places).query(some, k=2, workers=-1)[0][:, 1]


def search_range(x, y, normal, widest, diagnosis):
    """Bandwidths to examine, up to well above the oversmoothed one.

    The lower end is a fortieth of the normal scale, or more where the nearest neighbours, the
    rounding of the coordinates or the size of the lattice allow no narrower ones.
    """
    highest = 1.6 * max(normal, widest)
    lowest = max(
        normal / NARROWEST,
        diagnosis.nearest / 2,
        diagnosis.rounding,
        narrowest_bandwidth(x, y, highest),
    )
    return np.geomspace(min(lowest, highest / 3), highest, BANDWIDTHS)


def best_inside(bandwidths, merit):
    """Bandwidth of the highest merit that lies inside the range, refined by a parabola.

    Where merit keeps rising towards 0, the widest local best is taken (Park & Marron 1990,
    Journal of the American Statistical Association 85:66-72).

    Returns
    -------
    float
        NaN when no bandwidth inside the range is better than both of its neighbours.
    """
    inside = np.flatnonzero((merit[1:-1] > merit[:-2]) & (merit[1:-1] >= merit[2:])) + 1
    if inside.size == 0:
        return math.nan
    falling_to_zero = merit[0] >= merit[inside].max()
    place = inside[-1] if falling_to_zero else inside[np.argmax(merit[inside])]
    before, here, after = merit[place - 1 : place + 2]
    offset = 0.5 * (before - after) / (before - 2 * here + after)
    step = math.log(bandwidths[1] / bandwidths[0])
    return float(bandwidths[place] * math.exp(offset * step))


def _inside(x, y, weights, boundary):
    if boundary is None:
        return x, y, weights, 0
    shapely.prepare(boundary)
    inside = shapely.intersects_xy(boundary, x, y)
    if not inside.any():
        raise InputError(
            "None of the {} records lies inside BOUNDARY; check that both layers show the "
            "same area and that their CRS are set.",
            x.size,
        )
    return x[inside], y[inside], weights[inside], int(x.size - inside.sum())


def _near_boundary(x, y, weights, boundary, distance):
    if boundary is None:
        return math.nan
    step = max(1, x.size // SAMPLE)
    rim = shapely.buffer(shapely.boundary(boundary), distance)
    shapely.prepare(rim)
    near = shapely.intersects_xy(rim, x[::step], y[::step])
    return float(weights[::step][near].sum() / weights[::step].sum())


def _choose(diagnosis, normal, widest, least_squares, likelihood):
    """The advised bandwidth and the reason in a sentence."""
    if diagnosis.effective < FEWEST_RECORDS:
        return widest, Words(
            "With an effective {:.0f} records cross-validation is left to chance, so the "
            "oversmoothed value is advised: it invents no structure.",
            diagnosis.effective,
        )
    floor = diagnosis.rounding
    if diagnosis.pairs > STACKED_PAIRS or diagnosis.stacked > STACKED_RECORDS:
        if normal >= floor:
            return normal, Words(
                "Records stacked on the same coordinates mislead cross-validation, so the "
                "normal-scale value is advised without it."
            )
        return floor, Words(
            "Records stacked on the same coordinates mislead cross-validation, so the spacing of "
            "the coordinates is advised without it."
        )
    if math.isnan(least_squares) and math.isnan(likelihood):
        return max(normal, floor), Words(
            "Neither cross-validation curve has a best value inside its range, so the "
            "normal-scale value is advised."
        )
    if math.isnan(least_squares) or math.isnan(likelihood):
        name, value = LEAST_SQUARES, least_squares
        if math.isnan(least_squares):
            name, value = LIKELIHOOD, likelihood
        return max(value, floor), Words(
            "Only the {} curve has a best value inside its range, and it is advised.", name
        )
    wider = max(least_squares, likelihood) / min(least_squares, likelihood)
    if wider <= AGREEMENT:
        reason = Words(
            "The two cross-validations agree within a factor of {:.2f}, and their geometric mean, "
            "which varies less than either, is advised.",
            wider,
        )
    else:
        reason = Words(
            "The two cross-validations differ by a factor of {:.1f}: least squares asks for "
            "detail where records crowd, likelihood for calm where they are few. Their geometric "
            "mean is advised as overall bandwidth of an adaptive surface; with one bandwidth "
            "everywhere, dense places are shown best by the least-squares value.",
            wider,
        )
    return max(math.sqrt(least_squares * likelihood), floor), reason


def _warnings(diagnosis, advised, least_squares, likelihood, near):
    words = []
    if diagnosis.outside:
        words.append(Words("{} records lie outside BOUNDARY and were left out.", diagnosis.outside))
    if diagnosis.effective < FEW_RECORDS:
        counted = Words("{} records", diagnosis.records)
        if diagnosis.effective < 0.95 * diagnosis.records:
            counted = Words(
                "{}, an effective {:.0f} by their weights,", counted, diagnosis.effective
            )
        words.append(
            Words(
                "{} are few: cross-validation varies a good deal from one such sample to the "
                "next. Look at the surface at half and at twice the advised value too.",
                counted,
            )
        )
    if diagnosis.stacked > 0.02:
        found = Words(
            "{:.0f} % of the records share their coordinates with another ({} records on {} "
            "places).",
            100 * diagnosis.stacked,
            diagnosis.records,
            diagnosis.places,
        )
        consequence = Words("This draws cross-validation towards narrow bandwidths.")
        if diagnosis.collapses:
            consequence = Words(
                "The least-squares score falls without limit as the bandwidth goes to 0, so its "
                "lowest value says nothing."
            )
        words.append(joined([found, consequence]))
    if diagnosis.rounding > 0.1 * advised:
        words.append(
            Words(
                "The coordinates look rounded to a lattice of about {:.3g} m, so no detail below "
                "that is in the data; narrower bandwidths were not considered.",
                diagnosis.rounding,
            )
        )
    for value, name in ((least_squares, LEAST_SQUARES), (likelihood, LIKELIHOOD)):
        if math.isnan(value):
            words.append(
                Words(
                    "The {} curve has no best value inside the range examined: it keeps improving "
                    "to one end.",
                    name,
                )
            )
    if near > NEAR_BOUNDARY:
        words.append(
            Words(
                "{:.0f} % of the records lie within one bandwidth of the boundary. "
                "Cross-validation takes the ground outside for empty and comes out somewhat "
                "narrow; switch on an edge correction for the surface.",
                100 * near,
            )
        )
    return words
