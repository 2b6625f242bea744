from collections import Counter
from itertools import product

import networkx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chisquare
from steadfield.algorithms.numeric import growth
from steadfield.algorithms.numeric.balancing import balanced
from steadfield.algorithms.numeric.builders import (
    BALANCED,
    GROWN,
    TREE_CUT,
    Recipe,
    build,
    least_total_for,
)
from steadfield.algorithms.numeric.contiguity import from_pairs
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.numeric.growth import grown
from steadfield.algorithms.numeric.treezones import short_parts, tree_cut


def board(rows, columns):
    index = np.arange(rows * columns).reshape(rows, columns)
    across = np.c_[index[:, :-1].ravel(), index[:, 1:].ravel()]
    down = np.c_[index[:-1].ravel(), index[1:].ravel()]
    return from_pairs(rows * columns, np.r_[across, down])


def as_networkx(graph):
    made = networkx.Graph()
    made.add_nodes_from(range(graph.units))
    made.add_edges_from(graph.pairs.tolist())
    return made


def canonical(labels):
    """The partition as a sorted tuple of sorted tuples of units, whatever the numbering."""
    zones = {}
    for unit, zone in enumerate(labels):
        zones.setdefault(int(zone), []).append(unit)
    return tuple(sorted(tuple(units) for units in zones.values()))


def assert_contiguous(graph, labels):
    network = as_networkx(graph)
    for row in labels:
        assert set(row) == set(range(row.max() + 1))
        for zone in canonical(row):
            assert networkx.is_connected(network.subgraph(zone))


@st.composite
def random_maps(draw):
    """A random planar-like graph, connected or not, with totals."""
    generator = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    graph = board(draw(st.integers(2, 6)), draw(st.integers(2, 6)))
    kept = graph.pairs[generator.random(len(graph.pairs)) < draw(st.sampled_from([0.6, 0.9, 1.0]))]
    totals = generator.integers(0, 20, graph.units).astype(float) + (generator.random() < 0.5)
    return from_pairs(graph.units, kept), totals, generator


@settings(max_examples=40, deadline=None, derandomize=True)
@given(random_maps())
def test_grown_zones_are_contiguous_complete_and_as_many_as_asked(made):
    graph, _, generator = made
    parts = graph.components()[0]
    wanted = int(generator.integers(parts, graph.units + 1))
    labels = grown(graph, wanted, 5, generator)
    assert labels.shape == (5, graph.units)
    assert (labels.max(axis=1) == wanted - 1).all()
    assert_contiguous(graph, labels)


@settings(max_examples=40, deadline=None, derandomize=True)
@given(random_maps())
def test_tree_cut_zones_are_contiguous_and_hold_the_least_total(made):
    graph, totals, generator = made
    _, part = graph.components()
    held = np.bincount(part, totals)
    least = held.max() * generator.uniform(0.05, 1)
    if not least > 0:
        return
    labels = tree_cut(graph, totals, least, 5, generator)
    assert_contiguous(graph, labels)
    for row in labels:
        zone_totals = np.bincount(row, totals)
        short = zone_totals < least
        # only a connected part that holds less than that altogether falls short
        assert short.sum() == short_parts(graph, totals, least) == (held < least).sum()
        assert zone_totals.sum() == totals.sum()


@settings(max_examples=30, deadline=None, derandomize=True)
@given(random_maps())
def test_balanced_zones_are_contiguous_and_within_the_tolerance(made):
    graph, _, generator = made
    if graph.components()[0] > 1:
        return
    totals = generator.uniform(0.8, 1.2, graph.units)
    labels = balanced(graph, totals, 3, 0.6, 4, generator)
    assert_contiguous(graph, labels)
    for row in labels:
        ideal = totals.sum() / 3
        assert (np.abs(np.bincount(row, totals) - ideal) <= 0.6 * ideal * (1 + 1e-6)).all()


@pytest.mark.parametrize("builder", [GROWN, TREE_CUT, BALANCED])
def test_no_zone_crosses_a_kept_line(builder):
    groups = np.repeat([0, 1, 2, 2], 9)
    graph = board(6, 6).within(groups)
    recipe = Recipe(builder, 7, least_total=4, tolerance=0.5)
    labels = build(graph, np.ones(36), recipe, 50, np.random.default_rng(1))
    assert_contiguous(graph, labels)
    for row in labels:
        for zone in canonical(row):
            assert len(set(groups[list(zone)])) == 1


@pytest.mark.parametrize("builder", [GROWN, TREE_CUT, BALANCED])
def test_the_same_generator_gives_the_same_zonings(builder):
    recipe = Recipe(builder, 5, least_total=4, tolerance=0.5)
    first, second = (
        build(board(6, 5), np.ones(30), recipe, 20, np.random.default_rng(7)) for _ in range(2)
    )
    assert np.array_equal(first, second)


def test_sweeping_and_the_heap_grow_the_same_zones_from_the_same_times():
    graph = board(9, 11)
    generator = np.random.default_rng(2)
    seeds = np.argsort(generator.random((200, graph.units)), axis=1)[:, :8]
    times = generator.standard_exponential((len(graph.pairs), 200), dtype=np.float32)
    swept = growth.grow_by_sweeps(growth._sweep_plan(graph), seeds, times)
    assert np.array_equal(swept, growth.grow_by_heap(growth._heap_plan(graph), seeds, times))


def test_growth_is_the_nearest_seed_of_an_independent_shortest_path_library():
    graph = board(6, 6)
    generator = np.random.default_rng(3)
    times = generator.standard_exponential((len(graph.pairs), 10), dtype=np.float32)
    seeds = np.argsort(generator.random((10, 36)), axis=1)[:, :5]
    labels = growth.grow_by_sweeps(growth._sweep_plan(graph), seeds, times)
    for row in range(10):
        network = networkx.Graph()
        for (a, b), time in zip(graph.pairs.tolist(), times[:, row].astype(float)):
            network.add_edge(a, b, weight=time)
        distance = [networkx.single_source_dijkstra_path_length(network, s) for s in seeds[row]]
        nearest = [int(np.argmin([d[u] for d in distance])) for u in range(36)]
        assert labels[row].tolist() == nearest


def eden_law(graph, seeds):
    """Exact law of growth from given seeds: each step crosses one open pair, drawn evenly."""
    neighbours = {u: set() for u in range(graph.units)}
    for a, b in graph.pairs.tolist():
        neighbours[a].add(b)
        neighbours[b].add(a)
    states = {tuple(seeds.index(u) if u in seeds else -1 for u in range(graph.units)): 1.0}
    for _ in range(graph.units - len(seeds)):
        following = Counter()
        for state, chance in states.items():
            moves = [
                (v, state[u])
                for u in range(graph.units)
                if state[u] >= 0
                for v in neighbours[u]
                if state[v] < 0
            ]
            for v, zone in moves:
                after = (*state[:v], zone, *state[v + 1 :])
                following[after] += chance / len(moves)
        states = following
    return states


def test_growth_follows_the_exact_law_of_competing_eden_clusters():
    graph = board(3, 3)
    law = eden_law(graph, [0, 5])
    many = 20_000
    generator = np.random.default_rng(4)
    times = generator.standard_exponential((len(graph.pairs), many), dtype=np.float32)
    seeds = np.tile([0, 5], (many, 1))
    labels = growth.grow_by_sweeps(growth._sweep_plan(graph), seeds, times)
    seen = Counter(map(tuple, labels.tolist()))
    assert set(seen) <= set(law)
    assert chi_squared_p_value(seen, law, many) > 0.001


def chi_squared_p_value(seen, law, many):
    """P-value of the frequencies; outcomes expected fewer than 8 times are pooled."""
    expected = np.array([law[key] * many for key in law])
    observed = np.array([seen.get(key, 0) for key in law])
    rare = expected < 8
    expected = np.r_[expected[~rare], expected[rare].sum()]
    observed = np.r_[observed[~rare], observed[rare].sum()]
    keep = expected > 0
    return chisquare(observed[keep], expected[keep] * observed.sum() / expected.sum()).pvalue


def contiguous_partitions(graph, zones):
    """Every partition into so many contiguous zones, by brute force over all labelings."""
    network = as_networkx(graph)
    found = set()
    for labels in product(range(zones), repeat=graph.units):
        # first occurrences in order: one labeling a partition
        firsts = [labels.index(z) for z in range(zones) if z in labels]
        if len(firsts) < zones or firsts != sorted(firsts):
            continue
        partition = canonical(labels)
        if all(networkx.is_connected(network.subgraph(zone)) for zone in partition):
            found.add(partition)
    return found


def test_grown_zones_reach_every_contiguous_partition_of_a_small_board():
    graph = board(3, 3)
    every = contiguous_partitions(graph, 3)
    labels = np.unique(grown(graph, 3, 60_000, np.random.default_rng(5)), axis=0)
    assert {canonical(row) for row in labels} == every


def spanning_trees(graph):
    """All spanning trees of a small graph, as sets of pair indices."""
    trees = [(frozenset(), tuple(range(graph.units)))]
    for index, (a, b) in enumerate(graph.pairs.tolist()):
        grown_trees = []
        for edges, label in trees:
            grown_trees.append((edges, label))
            if label[a] != label[b]:
                merged = tuple(label[a] if x == label[b] else x for x in label)
                grown_trees.append((edges | {index}, merged))
        trees = grown_trees
    return [edges for edges, label in trees if len(edges) == graph.units - 1]


def chance_of_minimum_tree(graph, edges):
    """Probability that a tree is the minimum one of independent costs.

    The next pair that the greedy construction accepts is drawn evenly from those that still
    join two clusters; so sum over the orders of the tree's pairs, cluster set by cluster set.
    """
    edges = tuple(sorted(edges))
    chances = {frozenset(): 1.0}
    for _ in edges:
        following = Counter()
        for chosen, chance in chances.items():
            label = list(range(graph.units))
            for index in chosen:
                a, b = (label[u] for u in graph.pairs[index])
                label = [a if x == b else x for x in label]
            label = np.array(label)
            crossing = (label[graph.pairs[:, 0]] != label[graph.pairs[:, 1]]).sum()
            for index in edges:
                if index not in chosen:
                    following[chosen | {index}] += chance / crossing
        chances = following
    return chances[frozenset(edges)]


def cut_one_tree(graph, edges, root, totals, least):
    """The rule of the tree-cut, one unit at a time."""
    tree = networkx.Graph([tuple(graph.pairs[index]) for index in edges])
    parent = dict(networkx.bfs_predecessors(tree, root))
    depth = networkx.single_source_shortest_path_length(tree, root)
    held, members = dict(enumerate(totals)), {u: [u] for u in range(graph.units)}
    zones, remainder = [], members[root]
    for unit in sorted(depth, key=lambda u: -depth[u]):
        if held[unit] >= least:
            zones.append((held[unit], unit, members[unit]))
            if unit == root:
                remainder = []
        elif unit != root:
            held[parent[unit]] += held[unit]
            members[parent[unit]].extend(members[unit])
    if remainder:
        hanging = [z for z in zones if parent[z[1]] in remainder]
        min(hanging)[2].extend(remainder)
    return tuple(sorted(tuple(sorted(zone[2])) for zone in zones))


def test_tree_cut_follows_its_exact_law_over_all_spanning_trees():
    graph = board(3, 3)
    totals = np.array([1.0, 2, 1, 1, 3, 1, 2, 1, 1])
    trees = spanning_trees(graph)
    assert len(trees) == 192  # OEIS A007341: spanning trees of the 3 x 3 board
    law = Counter()
    for edges in trees:
        chance = chance_of_minimum_tree(graph, edges)
        for root in range(9):
            law[cut_one_tree(graph, edges, root, totals, 4.0)] += chance / 9
    assert sum(law.values()) == pytest.approx(1)
    many = 30_000
    labels = tree_cut(graph, totals, 4.0, many, np.random.default_rng(6))
    rows, times = np.unique(labels, axis=0, return_counts=True)
    seen = Counter()
    for row, number in zip(rows, times):
        seen[canonical(row)] += int(number)
    assert set(seen) <= set(law)
    assert chi_squared_p_value(seen, law, many) > 0.001


@pytest.mark.parametrize(("zones", "low", "high"), [(4, 3.4, 4.6), (12, 11, 13), (30, 27, 33)])
def test_a_least_total_is_found_for_a_number_of_zones(zones, low, high):
    graph, totals = board(15, 15), np.ones(225)
    least = least_total_for(graph, totals, zones, np.random.default_rng(8))
    labels = tree_cut(graph, totals, least, 200, np.random.default_rng(9))
    assert low < (labels.max(axis=1) + 1).mean() < high


def test_separate_parts_get_balanced_zones_by_their_total():
    graph = board(4, 6).within(np.repeat([0, 1], 12))
    totals = np.repeat([3.0, 1.0], 12)
    labels = balanced(graph, totals, 4, 0.4, 20, np.random.default_rng(10))
    for row in labels:
        assert len(set(row[:12])) == 3 and len(set(row[12:])) == 1


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda g, r: grown(g, 31, 1, r), "31 zones cannot be made of 30 units"),
        (lambda g, r: grown(g.within(np.arange(30) % 2), 3, 1, r), "KEEP_WITHIN"),
        (lambda g, r: tree_cut(g, np.ones(30), 31.0, 1, r), "31 is more than there is"),
        (lambda g, r: tree_cut(g, np.ones(30), 0.0, 1, r), "above 0"),
        (lambda g, r: balanced(g, np.r_[20, np.ones(29)], 3, 0.1, 1, r), "unit number 1 alone"),
        (lambda g, r: balanced(board(2, 3), np.ones(6), 4, 0.0, 1, r), "larger tolerance"),
        (lambda g, r: balanced(g, np.zeros(30), 7, 0.0, 1, r), "holds nothing"),
        (lambda g, r: Recipe("woven", 3), "woven"),
    ],
)
def test_zones_that_cannot_be_made_are_refused_in_words(make, words, monkeypatch):
    monkeypatch.setattr("steadfield.algorithms.numeric.balancing.FRESH_STARTS", 3)
    with pytest.raises(InputError, match=words):
        make(board(5, 6), np.random.default_rng(0))


def test_regions_without_a_cut_are_joined_again_until_narrow_zones_are_found():
    # six units a zone, the largest more than twice the smallest: many cuts lead nowhere
    generator = np.random.default_rng(11)
    graph, totals = board(20, 20), generator.integers(6, 15, 400).astype(float)
    labels = balanced(graph, totals, 66, 0.2, 4, generator)
    assert_contiguous(graph, labels)
    ideal = totals.sum() / 66
    for row in labels:
        assert (np.abs(np.bincount(row, totals) - ideal) <= 0.2 * ideal * (1 + 1e-6)).all()


@pytest.mark.parametrize("builder", [GROWN, TREE_CUT, BALANCED])
@pytest.mark.parametrize("side", [30, 90])
def test_progress_rises_and_is_called_often_while_zonings_are_made(builder, side):
    graph = board(side, side)
    recipe = Recipe(builder, 40, least_total=side**2 / 60, tolerance=0.3)
    many = {30: 400, 90: 60}[side] if builder != BALANCED else 6
    shares = []
    build(graph, np.ones(side**2), recipe, many, np.random.default_rng(1), shares.append)
    assert sorted(shares) == shares and shares[0] >= 0 and shares[-1] < 1
    assert len(set(shares)) >= 4


def test_one_zone_and_a_zone_a_unit_are_made():
    graph = board(3, 4)
    generator = np.random.default_rng(1)
    assert (grown(graph, 1, 3, generator) == 0).all()
    assert (np.sort(grown(graph, 12, 3, generator), axis=1) == np.arange(12)).all()
    assert (balanced(graph, np.ones(12), 1, 0, 3, generator) == 0).all()
