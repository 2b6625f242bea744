"""What the plugin says when a package of the core is missing or too old."""

from importlib.metadata import PackageNotFoundError

import pytest
from steadfield.plugin.packages import NEEDED, missing_packages


def versions(**known):
    def found(name):
        if name not in known:
            raise PackageNotFoundError(name)
        return known[name]

    return found


@pytest.mark.parametrize("shapely", ["2.0.0", "2.1rc1", "2.1", "10.0.1"])
def test_nothing_is_said_when_all_packages_are_new_enough(shapely, tmp_path):
    assert missing_packages(versions(numpy="1.21.0", scipy="1.8", shapely=shapely), tmp_path) == []


@pytest.mark.parametrize("old", ["1.8.5.post1", "1.9", "0.20"])
def test_a_package_that_is_too_old_is_named_with_both_versions_and_the_fix(old, tmp_path):
    there = versions(numpy="2.4.6", scipy="1.17.1", shapely=old)
    (sentence,) = missing_packages(there, tmp_path)
    assert "shapely 2.0 or newer" in sentence and old in sentence
    assert sentence.endswith("pip install 'shapely>=2.0'")


def test_each_missing_package_has_a_sentence_of_its_own(tmp_path):
    sentences = missing_packages(versions(), tmp_path)
    assert [sentence.split()[0] for sentence in sentences] == list(NEEDED)
    assert all("missing" in sentence for sentence in sentences)


# PEP 668: a file of this name in the folder of the standard library makes pip refuse
def test_where_the_system_keeps_its_packages_the_fix_says_how_pip_will_take_it(tmp_path):
    (tmp_path / "EXTERNALLY-MANAGED").touch()
    (sentence,) = missing_packages(versions(numpy="1.24", scipy="1.10"), tmp_path)
    assert "pip install --user --break-system-packages 'shapely>=2.0'" in sentence
