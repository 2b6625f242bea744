"""Every algorithm of the provider with every kind of bad input.

What must come out is known without running the algorithm on bad input: a refusal that names the
parameter, or the result of the same data in good state (a foot is 0.3048 m exactly; degrees are the
inverse of the projection). The table is printed at the end of the run, see conftest.py.
"""

import re
import shutil
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from qgis.core import QgsApplication
from steadfield.plugin.provider import ALGORITHMS

sys.path.insert(0, str(Path(__file__).parent))
import bad_input_layers as data
from bad_input import KINDS, RECIPES, Recipe
from bad_input_feeds import CRS, Feeds
from bad_input_runs import Outcome, Watcher, difference, run

CASES = [(algorithm, kind) for algorithm in ALGORITHMS for kind in KINDS]
LATENCY = 1.5  # a second, and what a busy machine adds
WITHOUT_RASTER_CASE = {"z", "zm", "w-nul", "wrong"}


@dataclass
class Bench:
    """Runs of one algorithm on data in any state, each into a folder of its own."""

    algorithm: str
    recipe: Recipe
    feeds: Feeds
    folder: Path
    kept: dict

    def parameters(self, kind, weighted=False, **changes):
        """Parameters with the main data in a state."""
        given = {**self.recipe.settings}
        if weighted:
            given.update(self.recipe.weights)
        given.update(changes)
        if kind == "names":
            column = next(iter(self.recipe.weights.values()), None)
            given = {
                name: data.STRANGE_FIELD if column and value == column else value
                for name, value in given.items()
            }
        for name, value in given.items():
            if isinstance(value, str) and value.startswith("good:"):
                given[name] = self.feeds(value[5:], "good")
        if self.recipe.main:
            given[self.recipe.main] = self.feeds(self.recipe.feed, kind)
        return given

    def targets(self, folder, everything=False):
        """Where the outputs go: those that are on by default, or all."""
        folder.mkdir(exist_ok=True)
        wanted = {
            name: folder / f"{name.lower()}{ending}"
            for name, ending in self.recipe.outputs.items()
            if everything or name not in self.recipe.optional or name in self.recipe.settings
        }
        return wanted

    def run(self, kind, watcher=None, everything=False, folder=None, **changes):
        """Run on data in a state."""
        folder = folder or self.folder / "out"
        targets = self.targets(folder, everything)
        changes = {name: value for name, value in changes.items() if name not in targets}
        given = {
            name: value
            for name, value in self.parameters(kind, **changes).items()
            if name not in targets
        }
        before = self.feeds.files()
        outcome = run(self.algorithm, given, targets, watcher)
        check_files(outcome, self.recipe, targets)
        beside = self.feeds.files() - before
        assert not beside, f"written beside the input: {beside}"
        return outcome

    def good(self, kind="good", weighted=False):
        """The result on good data, worked out once."""
        key = self.algorithm, kind, weighted
        if key not in self.kept:
            folder = self.folder / "good"
            self.kept[key] = self.run(kind, weighted=weighted, folder=folder)
            assert self.kept[key].trouble is None, self.kept[key].trouble
            shutil.rmtree(folder)
        return self.kept[key]


def check_files(outcome, recipe, targets):
    """A run leaves what was asked for, whole, or nothing."""
    if outcome.trouble is not None:
        assert not outcome.files, f"left behind: {outcome.files}; {outcome.trouble}"
        return
    beside = {path.with_suffix(".qml").name for path in targets.values()}
    beside |= {f"{path.name}.aux.xml" for path in targets.values()}
    beside |= {path.with_suffix(".png").name for path in targets.values() if path.suffix == ".svg"}
    named = {path.name for path in targets.values()}
    missing = {path.name for path in targets.values() if path.suffix} - outcome.files
    assert not missing, f"not written: {missing}"
    assert outcome.files <= named | beside, f"left behind: {outcome.files - named - beside}"


@pytest.fixture(scope="session")
def feeds(tmp_path_factory, provider):
    made = Feeds(tmp_path_factory.mktemp("bad-input"))
    yield made
    # layers that outlive the host crash at exit
    made.made.clear()


@pytest.fixture(scope="session")
def kept():
    return {}


@pytest.fixture
def bench(feeds, kept, tmp_path):
    def make(algorithm):
        assert algorithm in RECIPES, (
            f"{algorithm} has no recipe: add its valid parameters to RECIPES in bad_input.py"
        )
        return Bench(algorithm, RECIPES[algorithm], feeds, tmp_path, kept)

    return make


@pytest.mark.parametrize(("algorithm", "kind"), CASES, ids=["-".join(case) for case in CASES])
def test_bad_input_ends_in_a_right_result_or_a_message(
    bench, algorithm, kind, record_property, monkeypatch
):
    # plots take most of the time of a small run, and a report has to come out without them
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    code = "FAIL"
    try:
        code = judge(bench(algorithm), kind)
    finally:
        record_property("bad input", f"{algorithm} {kind} {code}")


def judge(bench, kind):
    """Run one cell of the table and return its code; fails where the outcome is wrong."""
    recipe = bench.recipe
    on_rasters = recipe.feed in ("raster", "rasters")
    if kind in JUDGES:
        return JUDGES[kind](bench, kind)
    if not recipe.main or (on_rasters and kind in WITHOUT_RASTER_CASE):
        return "-"
    if kind == "wrong" and recipe.feed == "features":
        return "-"
    if on_rasters:
        return judge_rasters(bench, kind)
    if kind.startswith("w-"):
        return judge_weights(bench, kind) if recipe.weights else "-"
    outcome = bench.run(kind, **(recipe.tiny if kind == "huge" else {}))
    if kind in ("none", "null", "nocrs", "wrong"):
        return refused(bench, outcome, recipe.main)
    if kind in ("some", "nan", "inf"):
        return left_out(bench, outcome, bench.good(), data.LEFT_OUT)
    if kind in ("same", "one"):
        return plausible(bench, outcome)
    if kind == "huge":
        return too_large(bench, outcome)
    if kind == "far" and recipe.on_origin:
        assert outcome.trouble is None, outcome.trouble
        return plausible(bench, outcome)
    moved = recipe.moved_with_crs if kind in CRS else frozenset()
    return equal(bench, outcome, bench.good(), moved)


def judge_rasters(bench, kind):
    recipe = bench.recipe
    outcome = bench.run(kind, **(recipe.tiny if kind == "huge" else {}))
    if kind in ("none", "null", "nocrs"):
        return refused(bench, outcome, recipe.main)
    if kind in ("feet", "far"):
        return equal(bench, outcome, bench.good())
    if kind in ("nan", "inf"):
        if outcome.trouble:
            return plausible(bench, outcome)
        return equal(bench, outcome, bench.good("some"))
    if kind == "huge":
        return too_large(bench, outcome)
    if kind == "deg":
        assert outcome.trouble is None, outcome.trouble
    return plausible(bench, outcome)


def judge_weights(bench, kind):
    outcome = bench.run(kind, weighted=True)
    if kind == "w-all0" and outcome.trouble:
        return refused(bench, outcome, *bench.recipe.weights, bench.recipe.main)
    if kind == "w-all0" or (kind == "w-0" and bench.recipe.counts_zeros):
        return plausible(bench, outcome)
    if bench.recipe.feed == "points":
        wanted = bench.good("without", weighted=True)
        if kind == "w-0":
            return equal(bench, outcome, wanted)
        return left_out(bench, outcome, wanted, data.BAD_WEIGHTS)
    if kind == "w-0":
        return plausible(bench, outcome)
    # a count that is no count is unknown, whichever way it is wrong
    return left_out(bench, outcome, bench.good("w-nul", weighted=True), data.BAD_WEIGHTS)


def equal(bench, outcome, wanted, moved=frozenset()):
    found = difference(outcome, wanted, bench.recipe.free, moved)
    assert not found, found
    return "="


def left_out(bench, outcome, wanted, count):
    if bench.recipe.faults_are_results:
        assert outcome.trouble is None, outcome.trouble
        assert outcome.numbers["RECORDS_CONCERNED"] >= count
        return "ok"
    found = difference(outcome, wanted, bench.recipe.free)
    assert not found, found
    counted = r": (\d+) (?:features|zones|units) "
    counts = [int(one) for words in outcome.warnings for one in re.findall(counted, words)]
    assert sum(counts) == count, outcome.warnings
    return "w"


def names_a_parameter(bench, words):
    """Whether a message names a parameter by its key or by the words of the dialog."""
    algorithm = QgsApplication.processingRegistry().algorithmById(f"steadfield:{bench.algorithm}")
    known = algorithm.parameterDefinitions()
    by_key = any(re.search(rf"\b{one.name()}\b", words) for one in known)
    return by_key or any(one.description().lower() in words.lower() for one in known)


def refused(bench, outcome, *keys):
    """The run ended in a message that names one of the parameters."""
    if outcome.trouble is None and bench.recipe.faults_are_results:
        assert outcome.numbers["FAULTS"] > 0
        return "ok"
    assert outcome.trouble is not None, f"a result: {outcome.numbers}"
    assert any(re.search(rf"\b{key}\b", outcome.trouble) for key in keys), outcome.trouble
    assert "Unable to execute" not in outcome.trouble or bench.recipe.feed.startswith("raster")
    return "m"


def plausible(bench, outcome):
    """A whole result with finite numbers, or a message that names a parameter."""
    if outcome.trouble is not None:
        assert names_a_parameter(bench, outcome.trouble), outcome.trouble
        return "m"
    for name, values in outcome.arrays.items():
        assert not np.isinf(values).any(), name
    assert not [name for name, value in outcome.numbers.items() if np.isinf(value)]
    return "ok"


def too_large(bench, outcome):
    """Refused with a workable size where cells are asked for; a result otherwise."""
    keys = list(bench.recipe.tiny)
    if not keys and bench.recipe.feed != "raster":
        return plausible(bench, outcome)
    assert outcome.trouble is not None, "a result from cells too small to hold"
    assert any(key in outcome.trouble for key in keys or [bench.recipe.main]), outcome.trouble
    advised = re.search(r"([\d   .,]*\d) m\b(?!.* m\b)", outcome.trouble)
    assert advised, f"no workable size: {outcome.trouble}"
    return "m"


def judge_boundary(bench, kind):
    algorithm = QgsApplication.processingRegistry().algorithmById(f"steadfield:{bench.algorithm}")
    if algorithm.parameterDefinition("BOUNDARY") is None:
        return "-"
    outcome = bench.run("good", BOUNDARY=bench.feeds("zones", "none"))
    return refused(bench, outcome, "BOUNDARY")


def judge_names(bench, kind):
    folder = bench.folder / "Ausgänge 数 b c"
    weighted = bool(bench.recipe.weights)
    outcome = bench.run(kind, folder=folder, everything=True, weighted=weighted)
    if bench.recipe.main:
        equal(bench, outcome, bench.good(weighted=weighted))
    assert outcome.trouble is None, outcome.trouble
    for name, ending in bench.recipe.outputs.items():
        if ending in (".html", ".svg"):
            page = (folder / f"{name.lower()}{ending}").read_text(encoding="utf-8")
            assert str(bench.folder) not in page and str(bench.feeds.folder) not in page
            assert "Ausgänge" not in page
    return "="


def judge_unwritable(bench, kind):
    """Each output in turn on a path that cannot be written, all others on good ones."""
    folder = bench.folder / "out"
    for name, ending in bench.recipe.outputs.items():
        targets = bench.targets(folder)
        if kind == "noway":
            (bench.folder / "file").write_text("a file, not a folder")
            targets[name] = bench.folder / "file" / f"output{ending}"
        elif not ending:
            targets[name] = folder / "file"
            targets[name].write_text("a file, not a folder")
        else:
            targets[name] = bench.folder / f"folder{ending}"
            targets[name].mkdir(exist_ok=True)
        given = {
            key: value for key, value in bench.parameters("good").items() if key not in targets
        }
        outcome = run(bench.algorithm, given, targets)
        for path in (bench.folder / f"folder{ending}", folder / "file"):
            if path.is_dir():
                assert not any(path.iterdir())
        left = {one.name for one in folder.iterdir()} - {"file"}
        outside = {one.name for one in bench.folder.iterdir()} - {"out", "file", "good"}
        outside = {one for one in outside if not one.startswith("folder")}
        assert outcome.trouble is not None, f"{name}: a result, and {left}"
        assert not left and not outside, f"left behind: {left} {outside}; {outcome.trouble}"
        assert re.search(rf"\b{name}\b", outcome.trouble), outcome.trouble
    return "m"


def cancelled(outcome):
    assert "Cancelled" in outcome.trouble, outcome.trouble
    assert outcome.since_cancel < LATENCY, f"{outcome.since_cancel:.1f} s after the cancellation"
    return "c"


def judge_cancelled_before(bench, kind):
    watcher = Watcher(share=0.0)
    watcher.setProgress(0.0)
    assert watcher.isCanceled()
    outcome = bench.run("good", watcher)
    return cancelled(outcome)


def judge_cancelled(bench, kind):
    watcher = Watcher(share=0.2, moment=0.1)
    outcome = bench.run("longer" if bench.recipe.main else "good", watcher, **bench.recipe.longer)
    return plausible(bench, outcome) if outcome.trouble is None else cancelled(outcome)


def judge_cancelled_while_writing(bench, kind):
    folder = bench.folder / "out"
    folder.mkdir()
    outcome = bench.run("good", Watcher(folder=folder))
    return plausible(bench, outcome) if outcome.trouble is None else cancelled(outcome)


def judge_again(bench, kind):
    first = bench.run("good")
    second = bench.run("good")
    found = difference(second, first)
    assert not found, found
    folder = bench.folder / "out"
    before = {path.name: path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    watcher = Watcher(share=0.0)
    watcher.setProgress(0.0)
    given, targets = bench.parameters("good"), bench.targets(folder)
    given = {name: value for name, value in given.items() if name not in targets}
    third = run(bench.algorithm, given, targets, watcher)
    assert third.trouble is not None
    after = {path.name: path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    assert after == before, "a cancelled run harmed the earlier result"
    return "="


JUDGES = {
    "bound": judge_boundary,
    "names": judge_names,
    "noway": judge_unwritable,
    "isdir": judge_unwritable,
    "c-0": judge_cancelled_before,
    "c-20": judge_cancelled,
    "c-wr": judge_cancelled_while_writing,
    "again": judge_again,
}


def test_every_recipe_belongs_to_an_algorithm_of_the_provider():
    assert set(RECIPES) == set(ALGORITHMS)


def test_a_message_that_is_a_traceback_or_names_nothing_fails(bench):
    sample = bench("adaptivedensity")
    assert not names_a_parameter(sample, "something went wrong")
    assert names_a_parameter(sample, "Records (RECORDS): nothing is left")
    with pytest.raises(AssertionError):
        refused(sample, Outcome(trouble="Cell size (CELL_SIZE): too small"), "RECORDS")
    with pytest.raises(AssertionError):
        equal(sample, Outcome(numbers={"TOTAL": 2.0}), Outcome(numbers={"TOTAL": 1.0}))


@pytest.mark.parametrize("algorithm", ALGORITHMS)
def test_a_field_that_the_layer_lacks_is_named_with_its_parameter(bench, algorithm):
    made = bench(algorithm)
    registered = QgsApplication.processingRegistry().algorithmById(f"steadfield:{algorithm}")
    for definition in registered.parameterDefinitions():
        if definition.type() == "field" and definition.parentLayerParameterName():
            name = definition.name()
            if made.recipe.main and not fed(made, definition.parentLayerParameterName()):
                continue
            outcome = made.run("good", folder=made.folder / name, **{name: "lacking"})
            assert outcome.trouble is not None, name
            assert f"({name})" in outcome.trouble and "no field lacking" in outcome.trouble


def fed(made, parameter):
    """Whether the recipe has a layer for a parameter."""
    return parameter in made.parameters("good")
