import importlib.util
import re
from pathlib import Path

import pytest
from steadfield.algorithms.base import QUESTIONS

ROOT = Path(__file__).resolve().parent.parent.parent


@pytest.fixture(scope="module")
def pages(provider):
    specification = importlib.util.spec_from_file_location(
        "help_pages", ROOT / "tools" / "help_pages.py"
    )
    tool = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(tool)
    return tool.pages(provider.algorithms(), QUESTIONS)


def test_the_shipped_help_pages_say_what_the_algorithms_say(pages):
    for name, text in pages.items():
        shipped = (ROOT / "plugin" / "help" / name).read_text(encoding="utf-8")
        assert shipped == text, f"run tools/help_pages.py: {name} is out of date"


def test_every_algorithm_stands_in_the_index_and_has_a_picture(provider, pages):
    from steadfield.plugin.provider import ALGORITHMS

    for name in ALGORITHMS:
        assert f'href="{name}.html"' in pages["index.html"]
        assert f"pictures/{name}.png" in pages[f"{name}.html"]
        assert (ROOT / "icons" / f"{name}.svg").exists()


def test_links_and_pictures_of_the_readme_are_there():
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    for target in re.findall(r"\]\(([^)#]+)\)", text):
        assert target.startswith("http") or (ROOT / target).exists(), target


def test_every_parameter_but_the_outputs_has_help_and_every_tool_has_tags(provider):
    for algorithm in provider.algorithms():
        if not hasattr(algorithm, "QUESTION"):
            continue
        assert len(algorithm.tags()) >= 4, algorithm.name()
        for definition in algorithm.parameterDefinitions():
            if not definition.isDestination():
                assert definition.help(), f"{algorithm.name()}: {definition.name()}"
