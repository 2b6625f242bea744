"""The audit against bounds and identities that are published for tables of counts."""

import numpy as np
import pytest
import shapely
from scipy import sparse
from steadfield.algorithms.numeric.crossings import Network, two_families
from steadfield.algorithms.numeric.differencing import PublishedTable, audit
from steadfield.algorithms.numeric.intervals import PublishedCounts, exact, interval


def margins(truth):
    """Rows and columns of a table of counts as statements about its cells."""
    rows, columns = truth.shape
    cells = np.arange(truth.size).reshape(truth.shape)
    membership = np.zeros((rows + columns, truth.size), int)
    for row in range(rows):
        membership[row, cells[row]] = 1
    for column in range(columns):
        membership[rows + column, cells[:, column]] = 1
    sums = np.concatenate([truth.sum(axis=1), truth.sum(axis=0)]).astype(float)
    return PublishedCounts(sparse.csr_matrix(membership), sums, sums)


def network_interval(counts, table, atom):
    """Both ends of one atom by the network."""
    network = Network(counts, two_families(counts.membership), table.ravel().astype(float))
    network.raise_to(atom, np.inf)
    high = network.flow[atom]
    return network.lower_to_least(atom, ()), high


@pytest.mark.parametrize("seed", range(3))
def test_cells_between_two_margins_have_the_bounds_of_frechet(seed):
    """Fréchet (1940): max(0, row + column - total) <= cell <= min(row, column)."""
    truth = np.random.default_rng(seed).integers(0, 9, (4, 5))
    counts = margins(truth)
    total = truth.sum()
    for atom in range(truth.size):
        row, column = divmod(atom, 5)
        r, c = truth[row].sum(), truth[:, column].sum()
        expected = max(0, r + c - total), min(r, c)
        assert network_interval(counts, truth, atom) == expected
        assert interval(counts, np.arange(truth.size) == atom) == expected


@pytest.mark.parametrize("seed", range(3))
def test_cells_of_a_decomposable_three_way_table_have_the_bounds_of_dobra_and_fienberg(seed):
    """Dobra & Fienberg (2000), PNAS 97:11885, for published sums n_ij+ and n_i+k:

    max(0, n_ij+ + n_i+k - n_i++) <= n_ijk <= min(n_ij+, n_i+k).
    """
    truth = np.random.default_rng(seed).integers(0, 7, (2, 3, 3))
    cells = np.arange(truth.size).reshape(truth.shape)
    rows, sums = [], []
    for i in range(2):
        for j in range(3):
            rows.append(np.isin(np.arange(truth.size), cells[i, j]))
            sums.append(truth[i, j].sum())
        for k in range(3):
            rows.append(np.isin(np.arange(truth.size), cells[i, :, k]))
            sums.append(truth[i, :, k].sum())
    sums = np.array(sums, float)
    counts = PublishedCounts(sparse.csr_matrix(np.array(rows).astype(int)), sums, sums)
    for i, j, k in np.ndindex(truth.shape):
        first, second, slab = truth[i, j].sum(), truth[i, :, k].sum(), truth[i].sum()
        expected = max(0, first + second - slab), min(first, second)
        assert network_interval(counts, truth, cells[i, j, k]) == expected


def squares(number, width, offset=0.0):
    edges = offset + np.arange(number + 1) * width
    return np.array(
        [shapely.box(a, b, a + width, b + width) for b in edges[:-1] for a in edges[:-1]], object
    )


def test_a_zone_that_lies_inside_a_zone_of_another_layer_leaves_the_ring_around_it():
    """The basic case of Duke-Williams & Rees (1998): one zone nests in another's zone.

    The halo, zone minus nested zone, has the difference of the two counts.
    """
    inner = PublishedTable("Old", np.array([shapely.box(2, 2, 8, 8)], object), *exact([40]), ("A",))
    outer = PublishedTable(
        "New", np.array([shapely.box(0, 0, 10, 10)], object), *exact([44]), ("B",)
    )
    (risk,) = audit([inner, outer], 10).risks
    assert risk.words == "New B minus Old A leaves 4"
    assert risk.polygon.area == pytest.approx(100 - 36, abs=0.01)


@pytest.mark.parametrize("seed", range(6))
def test_every_difference_of_unions_below_the_threshold_is_covered_by_a_risk(seed):
    """Costemalle (2019): all unions of zones of one layer, minus all zones of the other inside.

    Tried one by one for a 3 x 3 and a shifted 2 x 2 board of squares.
    """
    generator = np.random.default_rng(seed)
    fine, coarse = squares(3, 4.0), squares(2, 6.0)
    x, y = generator.uniform(0, 12, (2, 150))
    tables = []
    for name, zones in (("Fine", fine), ("Coarse", coarse)):
        values = [shapely.contains_xy(zone, x, y).sum() for zone in zones]
        labels = tuple(str(n) for n in range(len(zones)))
        tables.append(PublishedTable(name, zones, *exact(values), labels))
    least_count = 12
    risks = audit(tables, least_count).risks
    covered = [risk.polygon.buffer(0.01) for risk in risks]
    small = 0
    for first, second in (tables, tables[::-1]):
        for chosen in range(1, 2 ** len(first.zones)):
            picked = [n for n in range(len(first.zones)) if chosen >> n & 1]
            union = shapely.union_all(first.zones[picked])
            inside = [n for n, zone in enumerate(second.zones) if union.buffer(0.01).contains(zone)]
            rest = shapely.difference(union, shapely.union_all(second.zones[inside]))
            count = first.lower[picked].sum() - second.lower[inside].sum()
            if 1 <= count < least_count and rest.area > 0.1:
                small += 1
                assert any(rest.buffer(0.01).contains(r.polygon) for r in risks)
    assert (small > 0) == bool(covered)
