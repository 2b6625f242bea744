"""The help pages: true to the code, complete, and with examples that run."""

import html
import re
import sys
from pathlib import Path

import pytest
from steadfield.algorithms.base import QUESTIONS

ROOT = Path(__file__).resolve().parent.parent.parent
HELP = ROOT / "plugin" / "help"
TEXTS = ROOT / "tools" / "help_texts"
PARTS = ("use", "not", "example", "reading", "method", "cautions")
# capitals in the texts that are no keys
WORDS = {"CRS", "SVG", "PNG", "QT_QPA_PLATFORM"}


@pytest.fixture(scope="module")
def tools():
    """The modules of the folder tools."""
    folder = str(ROOT / "tools")
    sys.path.insert(0, folder)
    try:
        import help_examples
        import help_pages

        yield help_pages, help_examples
    finally:
        sys.path.remove(folder)


@pytest.fixture(scope="module")
def by_name(provider):
    return {one.name(): one for one in provider.algorithms()}


@pytest.fixture(scope="module")
def pages(provider, tools):
    return tools[0].pages(provider.algorithms(), QUESTIONS)


def keys_of(algorithm):
    return {one.name() for one in algorithm.parameterDefinitions()} | {
        one.name() for one in algorithm.outputDefinitions()
    }


def codes(text):
    return [html.unescape(words) for words in re.findall(r"<code>([^<]+)</code>", text)]


def test_the_shipped_help_pages_say_what_algorithms_texts_and_demo_say(pages, tools):
    for name, text in pages.items():
        shipped = (HELP / name).read_text(encoding="utf-8")
        assert shipped == text, f"run tools/help_pages.py: {name} is out of date"
    shipped = {path.name for path in HELP.glob("*.html")}
    assert shipped == set(pages)
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    assert readme == tools[0].readme(), "run tools/help_pages.py: README.md is out of date"


def test_every_algorithm_has_a_text_with_every_part_and_a_picture(by_name, pages, tools):
    from steadfield.plugin.provider import ALGORITHMS

    for name in ALGORITHMS:
        text = sys.modules["help_parts"].sections(name)
        assert all(text[part].strip() for part in PARTS), name
        assert f"pictures/{name}.png" in pages[f"{name}.html"]
        assert (ROOT / "icons" / f"{name}.svg").exists()
    for name in by_name:
        assert f'href="{name}.html"' in pages["index.html"]
        assert by_name[name].helpUrl().endswith(f"/plugin/help/{name}.html")


def test_every_link_and_picture_of_the_help_is_there_and_none_is_left_over(pages):
    shown = set()
    for name, text in pages.items():
        assert "{tool:" not in text and not re.search(r">[^<]*\{\w+\}", text), name
        for target in re.findall(r'(?:href|src)="([^"]+)"', text):
            assert not target.startswith(("http", "/", "file")), f"{name}: {target}"
            assert (HELP / target).is_file(), f"{name}: {target}"
            shown.add(target)
    pictures = {f"pictures/{path.name}" for path in (HELP / "pictures").iterdir()}
    assert pictures <= shown
    assert sum(path.stat().st_size for path in (HELP / "pictures").iterdir()) < 3e6


def test_links_and_pictures_of_the_readme_are_there():
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    for target in re.findall(r"\]\(([^)#]+)\)", text):
        assert target.startswith("http") or (ROOT / target).exists(), target


def test_every_key_and_field_that_a_text_names_exists(by_name, tools):
    """A key is written in capitals, or as tool.KEY for another tool; a field in small letters."""
    outputs = sys.modules["help_parts"].stored("outputs")
    for name, algorithm in by_name.items():
        text = (TEXTS / f"{name}.html").read_text(encoding="utf-8")
        fields = {field for inner in outputs.get(name, {}).values() for field in inner}
        for words in codes(text):
            if re.fullmatch(r"(\w+)\.([A-Z_]+)", words):
                other, key = words.split(".")
                assert key in keys_of(by_name[other]), f"{name}: {words}"
            elif words.isupper():
                assert words in keys_of(algorithm), f"{name}: {words}"
            elif words.isidentifier():
                assert words in fields | set(outputs.get(name, {})), f"{name}: {words}"


def test_every_tool_and_parameter_of_an_example_exists_and_nothing_required_is_left_out(
    by_name, tools
):
    for name, algorithm in by_name.items():
        identifier, parameters = tools[1].example(name)
        assert identifier == algorithm.id()
        definitions = {one.name(): one for one in algorithm.parameterDefinitions()}
        assert set(parameters) <= set(definitions), name
        for key, definition in definitions.items():
            optional = definition.flags() & definition.Flag.FlagOptional
            needed = not optional and definition.defaultValue() in (None, "")
            assert not needed or key in parameters, f"{name}: {key}"


def test_every_tool_and_key_of_the_chain_exists(by_name):
    text = html.unescape((HELP / "commands.html").read_text(encoding="utf-8"))
    chain = re.search(r'<pre id="chain"><code>(.*?)</code></pre>', text, re.DOTALL).group(1)
    steps = re.findall(r"^step (\w+)((?:.*\\\n)*.*)$", chain, re.MULTILINE)
    assert len(steps) > 5
    for name, words in steps:
        keys = re.findall(r"--([A-Z_]+)=", words)
        assert keys and set(keys) <= keys_of(by_name[name]), name
    for name, key in re.findall(r"\$\(result (\w+) ([A-Z_]+)\)", chain):
        assert key in keys_of(by_name[name])


def test_every_example_runs_and_writes_the_bands_and_fields_that_its_page_names(
    by_name, tools, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    algorithms = {name: one for name, one in by_name.items() if hasattr(one, "QUESTION")}
    made = tools[1].run_all(algorithms)
    kept = (TEXTS / "outputs.json").read_text(encoding="utf-8")
    assert tools[1].written(made) == kept, "run tools/help_examples.py"


def test_no_figure_of_the_worked_case_is_typed_in():
    """Numbers stand in braces; left are ages, rates per 1000, numbered steps and units."""
    for name in ("workedcase.html", "readme.md"):
        text = (TEXTS / name).read_text(encoding="utf-8")
        bare = re.sub(r"\{\w+\}|\{tool:\w+\}|<[^>]+>|^\d\. ", "", text, flags=re.MULTILINE)
        bare = re.sub(r"^\s*\d\. ", "", bare, flags=re.MULTILINE)
        assert set(re.findall(r"\d+", bare)) <= {"1000", "65"}, name


def test_every_parameter_but_the_outputs_has_help_and_every_tool_has_tags(provider):
    for algorithm in provider.algorithms():
        if not hasattr(algorithm, "QUESTION"):
            continue
        assert len(algorithm.tags()) >= 4, algorithm.name()
        for definition in algorithm.parameterDefinitions():
            if not definition.isDestination():
                assert definition.help(), f"{algorithm.name()}: {definition.name()}"
