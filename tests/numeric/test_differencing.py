import sys
from pathlib import Path

import numpy as np
import pytest
import shapely

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from steadfield.algorithms.numeric.differencing import PublishedTable, audit
from steadfield.algorithms.numeric.errors import CancelledError, InputError
from steadfield.algorithms.numeric.intervals import below_threshold, exact, rounded

LEAST = 5


def columns(*edges):
    """Side-by-side zones between x edges, 10 high."""
    return np.array([shapely.box(a, 0, b, 10) for a, b in zip(edges, edges[1:])], object)


def table(name, zones, values, statement=exact, labels=None, **options):
    lower, upper = statement(np.asarray(values, float))
    labels = tuple(labels or (str(number + 1) for number in range(len(zones))))
    return PublishedTable(name, zones, lower, upper, labels, **options)


def only(risks):
    assert len(risks) == 1
    return risks[0]


def same_ground(one, other):
    return one.symmetric_difference(other).area < 0.01


def test_one_table_of_large_counts_is_clean():
    found = audit([table("Wards", columns(0, 10, 20), [50, 60])], LEAST)
    assert found.clean and found.worst_count == 0 and found.method == "network"
    assert not (found.risks or found.empty or found.contradictions or found.undecided)


def test_a_published_small_count_is_a_risk_by_itself():
    found = audit([table("Wards", columns(0, 10, 20), [3, 60], labels=("A7", "B1"))], LEAST)
    risk = only(found.risks)
    assert (risk.kind, risk.lower, risk.upper) == ("exact", 3, 3)
    assert risk.words == "Wards A7 is published as 3"
    assert same_ground(risk.polygon, shapely.box(0, 0, 10, 10))
    assert not found.clean and found.worst_count == 3


def test_a_hexagon_cut_by_a_zone_border_is_found():
    cells = table("Hexagons", columns(*range(0, 81, 10)), [20] * 8)
    wards = table("Wards", columns(0, 23, 80), [43, 117], labels=("A7", "B1"))
    risk = only(audit([cells, wards], LEAST).risks)
    assert risk.words == "Wards A7 minus Hexagons 1 and 2 leaves 3"
    assert (risk.lower, risk.upper) == (3, 3)
    assert same_ground(risk.polygon, shapely.box(20, 0, 23, 10))


def test_a_remainder_of_large_count_on_both_sides_is_no_risk():
    cells = table("Hexagons", columns(*range(0, 81, 10)), [20] * 8)
    wards = table("Wards", columns(0, 23, 80), [49, 111])
    assert audit([cells, wards], LEAST).clean


def test_a_remainder_without_records_is_reported_as_empty_and_not_as_disclosed():
    cells = table("Hexagons", columns(*range(0, 81, 10)), [20] * 8)
    wards = table("Wards", columns(0, 23, 80), [40, 120], labels=("A7", "B1"))
    found = audit([cells, wards], LEAST)
    assert found.clean
    empty = only(found.empty)
    assert (empty.kind, empty.upper) == ("empty", 0)
    assert empty.words == "Wards A7 minus Hexagons 1 and 2 leaves none"


def test_nested_unions_of_three_and_more_zones_leave_a_remainder_that_no_single_zone_leaves():
    """Districts 1+2+3 reach to 33, cells 1..6 to 30: only the unions of all of them differ by 4.

    Every cell border but the last keeps at least LEAST records on both sides.
    """
    cells = table("Cells", columns(*range(0, 61, 5)), [20] * 12)
    districts = table("Districts", columns(0, 12, 22, 33, 60), [50, 40, 34, 116])
    found = audit([cells, districts], LEAST)
    risk = only(found.risks)
    assert (risk.lower, risk.upper) == (4, 4)
    assert same_ground(risk.polygon, shapely.box(30, 0, 33, 10))
    assert risk.words == "Districts 1, 2 and 3 minus Cells 1, 2, 3, 4, 5 and 6 leaves 4"


def test_a_withheld_cell_is_had_back_from_the_total():
    zones = columns(0, 10, 20, 30)
    alone = table("Hexagons", zones, [20, np.nan, 30])
    assert audit([alone], LEAST).clean
    summed = table("Hexagons", zones, [20, np.nan, 30], total=(53, 53))
    risk = only(audit([summed], LEAST).risks)
    assert (risk.kind, risk.lower) == ("exact", 3)
    assert risk.words == "the total of Hexagons minus Hexagons 1 and 3 leaves 3"


def test_two_withheld_cells_of_a_small_sum_are_a_risk_together():
    zones = columns(0, 10, 20, 30)
    found = audit([table("Hexagons", zones, [np.nan, np.nan, 30], total=(34, 34))], LEAST)
    assert (only(found.risks).lower, found.risks[0].polygon.area) == (4, pytest.approx(200))
    assert audit([table("Hexagons", zones, [np.nan, np.nan, 30], total=(44, 44))], LEAST).clean


def test_cells_that_are_withheld_as_small_are_a_risk_only_when_narrowed():
    def as_small(values):
        return below_threshold(values, *exact(values), LEAST)

    zones = columns(0, 10, 20, 30)
    values = [np.nan, np.nan, 30]
    assert audit([table("Hexagons", zones, values, as_small)], LEAST).clean
    found = audit([table("Hexagons", zones, [*values[:2], 0], as_small, total=(7, 7))], LEAST)
    assert {(risk.kind, risk.lower, risk.upper) for risk in found.risks} == {("range", 3, 4)}
    assert found.risks[0].words == "Hexagons 2 is left 3 to 4 by the other published counts"


def test_rounding_is_defeated_by_several_roundings():
    """Base 3 at random: 27 shows at most 29; 9, 9 and 9 rounded from at least 7 each.

    Four tables that round the same ground anew leave fewer values than any of them: the strip
    shows 3 (1..5) and 6 (4..8), together 4..5; with the neighbour's floor only 4 is left.
    """
    zones = columns(0, 10, 20)
    first = table("First", zones, [3, 30], lambda v: rounded(v, 3))
    assert audit([first], 6).clean
    second = table("Second", zones, [6, 30], lambda v: rounded(v, 3))
    risk = only(audit([first, second], 6).risks)
    assert (risk.lower, risk.upper) == (4, 5)
    whole = table("Whole", columns(0, 20), [36], lambda v: rounded(v, 2), total=None)
    narrowed = audit([first, second, whole], 6).risks
    assert narrowed[0].lower >= 4


def test_rounding_finer_than_the_least_count_is_no_protection():
    zones = columns(0, 10, 20)
    coarse = table("Coarse", zones, [5, 40], lambda v: rounded(v, 5))
    assert audit([coarse], 9).clean
    fine = table("Fine", zones, [4, 40], lambda v: rounded(v, 2))
    assert audit([fine], 9).risks[0].lower == 3


def test_added_records_between_two_releases_are_a_remainder():
    zones = columns(0, 10, 20)
    earlier = table("Spring", zones, [20, 30], release=0)
    later = table("Autumn", zones, [22, 40], release=1)
    risk = only(audit([earlier, later], LEAST).risks)
    assert (risk.lower, risk.upper) == (2, 2)
    assert risk.words == "Autumn 1 minus Spring 1 leaves 2, added between the releases"
    assert same_ground(risk.polygon, zones[0])


def test_three_crossing_tables_together_give_away_what_no_two_of_them_do():
    """Six cells a..f under three zonings: 2b = (a+b) + (b+d) - (a+c) - (d+e) + (c+e) leaves b.

    The count of b follows by halving, which no sum or difference of two zonings does.
    """
    cell = dict(zip("abcdef", columns(0, 10, 20, 30, 40, 50, 60)))
    truth = dict(zip("abcdef", [20, 2, 30, 40, 50, 60]))

    def zoning(name, *zones):
        shapes = [shapely.union_all([cell[letter] for letter in zone]) for zone in zones]
        counts = [sum(truth[letter] for letter in zone) for zone in zones]
        return table(name, np.array(shapes, object), counts, labels=zones)

    tables = [
        zoning("First", "ab", "ce"),
        zoning("Second", "bd", "ac"),
        zoning("Third", "de"),
    ]
    for pair in ([0, 1], [0, 2], [1, 2]):
        assert audit([tables[number] for number in pair], LEAST).clean
    found = audit(tables, LEAST)
    assert found.method == "programmes"
    risk = only(found.risks)
    assert (risk.lower, risk.upper) == (2, 2) and same_ground(risk.polygon, cell["b"])


def test_records_confirm_every_risk_and_change_none():
    generator = np.random.default_rng(4)
    x, y = generator.uniform(0, 60, 130), generator.uniform(0, 10, 130)
    cells, wards = columns(*range(0, 61, 5)), columns(0, 17, 33, 60)

    def counted(zones):
        return np.histogram(x, [*(zone.bounds[0] for zone in zones), 60])[0]

    tables = [table("Cells", cells, counted(cells)), table("Wards", wards, counted(wards))]
    seen, blind = audit(tables, 10, records=(x, y)), audit(tables, 10)
    assert seen.risks and all(risk.lower <= risk.true_count <= risk.upper for risk in seen.risks)
    assert [risk.words for risk in seen.risks] == [risk.words for risk in blind.risks]
    assert np.isnan(blind.risks[0].true_count)


def test_contradicting_tables_are_never_called_clean():
    cells = table("Hexagons", columns(0, 10, 20), [20, 30])
    wards = table("Wards", columns(0, 20), [60], labels=("A7",))
    found = audit([cells, wards], LEAST)
    assert not found.clean
    assert found.contradictions and "would have to differ by" in found.contradictions[0]


def test_a_search_out_of_effort_is_never_called_clean():
    generator = np.random.default_rng(3)
    board = [shapely.box(x, y, x + 1, y + 1) for x in range(4) for y in range(4)]
    tables = []
    for name in ("First", "Second", "Third"):
        number = generator.integers(0, 3, 16)
        zones = [
            shapely.union_all([b for b, k in zip(board, number) if k == zone]) for zone in range(3)
        ]
        tables.append(table(name, np.array(zones, object), np.bincount(number, minlength=3) * 20))
    found = audit(tables, 30, effort=0)
    assert found.method == "programmes"
    assert found.undecided and found.undecided_area > 0 and not found.clean


def test_settings_that_make_no_sense_are_said():
    wards = table("Wards", columns(0, 10), [20])
    with pytest.raises(InputError, match="least count must be a whole number of 2 or more"):
        audit([wards], 1)
    with pytest.raises(InputError, match="at least one published layer"):
        audit([], 5)
    short = PublishedTable("Wards", columns(0, 10, 20), *exact([20]), ("1",))
    with pytest.raises(InputError, match="Wards: 2 zones but 1 counts"):
        audit([short], 5)


def test_cancelling_stops_the_audit():
    def stop(share):
        if share > 0.35:
            raise CancelledError

    with pytest.raises(CancelledError):
        audit([table("Wards", columns(0, 10, 20), [20, 30])], 5, progress=stop)
