"""Boundaries on a pixel lattice and what a kernel loses beyond them."""

import numpy as np
import shapely
from scipy.fft import fft as transform
from scipy.fft import irfft2, next_fast_len, rfft, rfft2

from .errors import InputError
from .kernels import GAUSSIAN, kernel_named
from .ladder import lagrange_weights
from .progress import silent
from .surface import adaptive_surface, kernel_mass

_WORKERS = 2
_RUNG_RATIO = 1.3
_BLOCK = 1 << 16


def boundary_mask(polygon, grid, progress=silent):
    """Share of every pixel's area that lies inside a polygon, exact.

    Every edge is cut at the pixel lines; each piece adds the signed area between itself and the
    right-hand side of its row, and a running sum along the row completes it.

    Parameters
    ----------
    polygon : shapely Polygon or MultiPolygon
        In units of the working CRS; holes and islands allowed. Overlapping parts count once.
    grid : Grid

    Returns
    -------
    (rows, columns) array, 0 to 1

    Raises
    ------
    InputError
        When the polygon is empty or does not meet the grid.
    """
    extent = shapely.box(*grid.bounds)
    if not shapely.is_valid(polygon):
        polygon = shapely.make_valid(polygon)
    polygon = shapely.intersection(polygon, extent)
    parts = [part for part in shapely.get_parts(polygon, return_index=False) if part.area > 0]
    if not parts:
        raise InputError("BOUNDARY has no area inside the extent of the surface; check its CRS.")
    polygon = shapely.union_all(parts)
    cover = np.zeros((grid.rows, grid.columns + 1))
    for ring, sign in _signed_rings(polygon):
        points = shapely.get_coordinates(ring)
        columns = (points[:, 0] - grid.left) / grid.cell
        rows = (grid.top - points[:, 1]) / grid.cell
        for start in range(0, len(points) - 1, _BLOCK):
            progress(start / len(points))
            chosen = slice(start, start + _BLOCK + 1)
            _add_edges(cover, columns[chosen], rows[chosen], sign)
    mask = np.cumsum(cover, axis=1)[:, :-1]
    # what the running sum leaves in rounding errors is neither inside nor outside
    mask[mask < 1e-9] = 0.0
    mask[mask > 1 - 1e-9] = 1.0
    return mask


def _signed_rings(polygon):
    """Rings of a polygon with the sign that makes shells add area and holes take it away."""
    rings = []
    for part in shapely.get_parts(polygon):
        for position, ring in enumerate([part.exterior, *part.interiors]):
            # with rows counted southwards, a counter-clockwise ring runs clockwise
            turn = 1.0 if shapely.is_ccw(ring) else -1.0
            rings.append((ring, turn if position == 0 else -turn))
    return rings


def _add_edges(cover, columns, rows, sign):
    """Add the signed areas of the pieces of a chain of edges, given in pixels from the corner."""
    start = np.column_stack([columns[:-1], rows[:-1]])
    change = np.column_stack([np.diff(columns), np.diff(rows)])
    edges = np.arange(len(start))
    numbers, shares = [edges, edges], [np.zeros(len(start)), np.ones(len(start))]
    for axis in (0, 1):
        low = np.floor(np.minimum(start[:, axis], start[:, axis] + change[:, axis])).astype(int) + 1
        high = np.ceil(np.maximum(start[:, axis], start[:, axis] + change[:, axis])).astype(int)
        count = np.maximum(high - low, 0)
        owner = np.repeat(edges, count)
        line = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count) + low[owner]
        numbers.append(owner)
        shares.append((line - start[owner, axis]) / change[owner, axis])
    numbers, shares = np.concatenate(numbers), np.clip(np.concatenate(shares), 0.0, 1.0)
    order = np.lexsort((shares, numbers))
    numbers, shares = numbers[order], shares[order]
    same = np.flatnonzero(numbers[1:] == numbers[:-1])
    owner, length = numbers[same], shares[same + 1] - shares[same]
    middle = start[owner] + (shares[same] + 0.5 * length)[:, None] * change[owner]
    column = np.clip(np.floor(middle[:, 0]).astype(int), 0, cover.shape[1] - 2)
    row = np.clip(np.floor(middle[:, 1]).astype(int), 0, cover.shape[0] - 1)
    drop = sign * length * change[owner, 1]
    inset = middle[:, 0] - column
    np.add.at(cover, (row, column), drop * (1.0 - inset))
    np.add.at(cover, (row, column + 1), drop * inset)


def record_factors(x, y, bandwidths, mask, grid, kernel="gaussian", progress=silent):
    """Share of each record's kernel that stays inside the boundary.

    Parameters
    ----------
    x, y, bandwidths : (n,) arrays
        Units of the working CRS; bandwidths of a pixel or more.
    mask : (rows, columns) array
        From boundary_mask.
    grid : Grid

    Returns
    -------
    (n,) array
        q_i, above 0. Weights w_i / q_i keep the total: the surface summed over the mask times
        the cell area equals the sum of w_i to rounding error.

    Raises
    ------
    InputError
        When a record's kernel misses the boundary altogether.

    References
    ----------
    Diggle (1985), Appl. Stat. 34:138.
    """
    factors = kernel_mass(x, y, bandwidths, mask, grid, kernel, progress)
    lost = np.count_nonzero(factors <= 1e-6)
    if lost:
        raise InputError(
            "{} records lie too far outside BOUNDARY for an edge correction by record; "
            "leave out records outside the boundary.",
            lost,
        )
    return factors


def place_factors(bandwidths, mask, grid, kernel="gaussian", progress=silent):
    """Share of a kernel at every pixel that lies inside the boundary.

    q_h(u) = integral of K_h(u - v) over the boundary; the uniform correction divides by it.

    Parameters
    ----------
    bandwidths : float, or (rows, columns) array
        Bandwidth at every pixel, units of the CRS, of a pixel or more.
    mask : (rows, columns) array
        From boundary_mask.
    grid : Grid

    Returns
    -------
    (rows, columns) array, 0 to 1
        Convolved at rungs of ratio 1.3 at most and interpolated between them in log h.

    References
    ----------
    Jones (1993), Stat. Comput. 3:135.
    """
    kernel = kernel_named(kernel)
    widths = np.broadcast_to(np.asarray(bandwidths, float) / grid.cell, mask.shape)
    low, high = float(widths.min()), float(widths.max())
    if not (np.isfinite(high) and low > 0):
        raise InputError("BANDWIDTH must be above 0 at every pixel; found {}.", low * grid.cell)
    steps = int(np.ceil(np.log(high / low) / np.log(_RUNG_RATIO) - 1e-9))
    rungs = np.geomspace(low, high, max(steps, 3) + 1) if steps else np.array([low])
    spectrum, period = _mask_spectrum(mask, kernel.reach * rungs[-1])
    factors = np.zeros(mask.shape)
    # first of the four rungs around each pixel's bandwidth
    position = np.log(widths / low) / np.log(rungs[1] / low) if steps else np.zeros(mask.shape)
    around = min(4, len(rungs))
    first = np.clip(np.floor(position).astype(int) - 1, 0, len(rungs) - around)
    for number, rung in enumerate(rungs):
        progress(number / len(rungs))
        share = _convolved(spectrum, period, kernel, rung, mask.shape)
        for offset in range(around):
            chosen = first == number - offset
            if chosen.any():
                own = position[chosen] - (number - offset)
                factors[chosen] += (
                    share[chosen] * lagrange_weights(own, np.arange(around))[:, offset]
                )
    return np.clip(factors, 0.0, 1.0, out=factors)


def _mask_spectrum(mask, reach):
    """Transform of a mask padded so that no offset between two of its pixels is wrapped."""
    period = tuple(
        next_fast_len(size + min(int(np.ceil(reach)), size), real)
        for size, real in zip(mask.shape, (False, True))
    )
    return rfft2(mask, s=period, workers=_WORKERS), period


def _convolved(spectrum, period, kernel, width, shape):
    """A mask smoothed by a kernel of a width in pixels."""
    offsets = [np.minimum(np.arange(size), size - np.arange(size)) for size in period]
    if kernel is GAUSSIAN:
        rows, columns = (
            np.exp(-0.5 * np.square(offset / width)) / (np.sqrt(2 * np.pi) * width)
            for offset in offsets
        )
        product = spectrum * transform(rows).real[:, None] * rfft(columns).real
    else:
        squared = np.square(offsets[0])[:, None] + np.square(offsets[1])
        product = spectrum * rfft2(kernel.value(squared, width), workers=_WORKERS)
    return irfft2(product, s=period, workers=_WORKERS, overwrite_x=True)[: shape[0], : shape[1]]


def bandwidth_at_places(x, y, weights, bandwidths, total, grid, kernel="gaussian", progress=silent):
    """Mean bandwidth of the kernels that make up a surface, at every pixel.

    sum_i w_i h_i K_i / sum_i w_i K_i: the bandwidth that place_factors needs for an adaptive
    surface. Held within the smallest and largest bandwidth; the largest where nothing reaches.

    Parameters
    ----------
    x, y, weights, bandwidths, grid, kernel, progress
        As for surface.adaptive_surface; weights not negative.
    total : (rows, columns) array
        The surface of the same arguments.

    Returns
    -------
    (rows, columns) array
        Units of the CRS.
    """
    bandwidths = np.broadcast_to(bandwidths, np.shape(x))
    low, high = float(bandwidths.min()), float(bandwidths.max())
    if low == high:
        return np.full(grid.shape, low)
    moments = adaptive_surface(x, y, weights * bandwidths, bandwidths, grid, kernel, progress)
    mean = np.divide(moments, total, out=np.full(grid.shape, high), where=total > 0)
    return np.clip(mean, low, high, out=mean)
