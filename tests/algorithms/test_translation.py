"""Every word that a user reads can be translated, and no figure hangs on the system's locale.

A pseudo-translation is the reference: see said_words.py.
"""

import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from qgis.core import QgsProcessingException
from steadfield.algorithms.numeric.errors import InputError
from steadfield.algorithms.settings import Settings
from steadfield.plugin.translation import translation_file

sys.path.insert(0, str(Path(__file__).parent))
from bad_input import RECIPES

HERE = Path(__file__).resolve().parent
ROOT = HERE.parent.parent
WORD = re.compile(r"[^\W\d_]{2,}")
# what stands in no language: keys of parameters, outputs and files, names of data (of fields, of
# layers and of their groups), units, CRS and software
NAMES = re.compile(
    r"""\bEPSG:\d+\ -\ [^⟦⟧]+ | \b[A-Z][A-Z0-9_]+\b | \b\w+-(good|none|w-neg)\b | \#[0-9a-f]{6}
    | \b(weight|part|household|month|kind|total|cases|others|ward|north|south|background)\b
    | \b(km|ha)\b | \bper\ km² | \bunknown\b | \bostermoor\.gpkg\b
    | \b(Steadfield|Python|numpy|scipy|shapely|CIEDE2000)\b""",
    re.VERBOSE,
)
# what the host says in its own words
HOST = re.compile(r"Results: |Unable to execute algorithm|Input parameters$|Outputs$|Band \d+: ")
# in rasters they are keys like the fields of a layer; a layer is called as its file
KEYS = re.compile(r" (band|legend)$")
KEY = re.compile(r"[a-z0-9_]+$")


@pytest.fixture(scope="module")
def told(tmp_path_factory):
    """What two runs of everything said: in English, and marked under decimal commas."""
    locales = tmp_path_factory.mktemp("locales")
    environment = {**os.environ, "QT_QPA_PLATFORM": "offscreen", "LANGUAGE": "C"}
    german = {"LC_ALL": "de_DE.UTF-8"}
    if shutil.which("localedef"):
        target = str(locales / "de_DE.UTF-8")
        command = ["localedef", "-i", "de_DE", "-f", "UTF-8", target]
        if subprocess.run(command, capture_output=True, check=False).returncode == 0:
            german["LOCPATH"] = str(locales)
    running = []
    for mode, settings in (("english", {"LC_ALL": "C.UTF-8"}), ("marked", german)):
        folder, profile = tmp_path_factory.mktemp(mode), tmp_path_factory.mktemp("profile")
        command = [sys.executable, str(HERE / "said_words.py"), str(folder), mode]
        settings = {**environment, **settings, "QGIS_CUSTOM_CONFIG_PATH": str(profile)}
        log = (folder / "log").open("wb")
        running.append((folder, subprocess.Popen(command, env=settings, stderr=log, stdout=log)))
    notes = []
    for folder, process in running:
        assert process.wait(300) == 0, (folder / "log").read_text(errors="replace")[-3000:]
        # paths of the two runs differ
        notes.append((folder / "notes.json").read_text("utf-8").replace(str(folder), "/folder"))
    return {"english": json.loads(notes[0]), "marked": json.loads(notes[1]), "text": notes[1]}


def outside(words):
    """What stands outside of marks."""
    found, depth = [], 0
    for letter in words:
        depth += (letter == "⟦") - (letter == "⟧")
        found.append(letter if depth == 0 else "⟧")
    return "".join(found)


def untranslated(pairs):
    """Pairs (where, words) with words that no translator was offered."""
    whole = {}
    for where, words in pairs:
        # the lines of a drawing are one text that was broken
        place = (where,) if where.endswith(".svg") else (where, len(whole))
        whole[place] = f"{whole[place]} {words}" if place in whole else words
    return [
        (place[0], words)
        for place, words in whole.items()
        if not HOST.match(words)
        and not (KEYS.search(place[0]) and KEY.match(words))
        and not (place[0] == "band" and KEY.match(words))
        and WORD.search(NAMES.sub("", outside(words)))
    ]


def test_the_marks_tell_what_was_offered_for_translation_from_what_was_not():
    assert outside("⟦The ⟧3 m⟦ of⟧ it").strip("⟧") == "3 m⟧⟧⟧⟧⟧ it"
    assert untranslated([("a", "⟦The size is ⟧3 m⟦.⟧"), ("b", "SEED: 5, weight")]) == []
    assert untranslated([("a", "⟦Advice: ⟧take the wider one")]) != []
    assert untranslated([("legend.svg", "⟦one"), ("legend.svg", "two⟧")]) == []


def test_every_word_of_dialogs_toolbox_and_models_is_offered_for_translation(told):
    said = told["marked"]["definitions"]
    assert set(RECIPES) < set(said) and len(said) > len(RECIPES)
    found = {name: untranslated(pairs) for name, pairs in said.items()}
    assert not {name: pairs for name, pairs in found.items() if pairs}
    assert not untranslated(told["marked"]["provider"])


@pytest.mark.parametrize("algorithm", RECIPES)
def test_every_word_of_reports_logs_warnings_fields_and_legends_is_offered(told, algorithm):
    runs = {
        name: notes["said"]
        for name, notes in told["marked"]["runs"].items()
        if name.split()[0] == algorithm
    }
    assert any(where == "report.html" for where, _ in runs[f"{algorithm} good"]) or (
        algorithm == "practicedistrict"
    )
    assert not {name: untranslated(pairs) for name, pairs in runs.items() if untranslated(pairs)}


@pytest.mark.parametrize("algorithm", RECIPES)
def test_decimal_commas_and_translation_change_no_figure_no_date_and_no_value(told, algorithm):
    """The marks taken away, both runs say and write the same to the letter."""
    assert told["english"]["decimal point"] == [".", "1.5"]
    assert told["marked"]["decimal point"][1] == "1,5"
    plain = json.loads(told["text"].replace("⟦", "").replace("⟧", ""))
    for name, english in told["english"]["runs"].items():
        if name.split()[0] != algorithm:
            continue
        other = plain["runs"][name]
        # a drawing breaks lines where they are full, marks and all
        assert _words(english["said"]) == _words(other["said"])
        for output, value in english["written"].items():
            if not output.endswith(".svg"):
                assert other["written"][output] == value, f"{name}: {output}"


def _words(pairs):
    """All that was said as words, whichever lines a drawing breaks them into."""
    lines = [words if ".svg" in where else f"{where} {words}" for where, words in pairs]
    return " ".join(lines).split()


# --- what translators get, and what becomes of their work


@pytest.fixture(scope="module")
def translation():
    """The command that gathers the words."""
    sys.path.insert(0, str(ROOT / "tools"))
    import translation

    yield translation
    sys.path.remove(str(ROOT / "tools"))


def test_every_message_of_the_code_can_be_extracted_and_takes_values(translation):
    messages = translation.messages_of_code()
    assert messages["Safe release"] == "algorithms/base.py"
    assert messages["{} of {} records"] == "algorithms/numeric/record_words.py"
    assert not [message for message in messages if translation.placeholders(message) is None]
    # what is compiled must be what is asked for while the plugin runs
    assert list(messages) == list(translation.messages_of_code())


def test_strings_side_by_side_are_one_message_and_others_are_refused(translation):
    text = 'tr("one "\n   "and two")\nother("three")\nprint(tr("zero").format(tr("four")))'
    found = translation.messages_of_module(text, "a.py", {"tr"})
    assert found == ["one and two", "zero", "four"]
    for call in ('tr(f"{number} records")', "tr(words)", 'tr("a" + b)', "tr()"):
        with pytest.raises(ValueError, match=r"a\.py, line 2: tr takes a literal text"):
            translation.messages_of_module(f"\n{call}", "a.py", {"tr"})


def test_words_of_models_are_extracted_and_keys_are_not(translation, provider):
    messages = translation.messages_of_models()
    assert "Advised density surface with outlines" in messages
    assert "Four rules, their curves, one advice." in messages
    assert not {"RECORDS", "hold:Places that hold", "ALG_DESC"} & set(messages)


def test_a_languages_file_keeps_what_is_done_and_drops_what_is_gone(translation, tmp_path):
    first = {"a < {}": "x.py", "“b” & c": "y.py"}
    path = translation.update("de", first, tmp_path)
    assert translation.read_translations(path) == {}
    done = translation.ts_text(first, "../../", "de", {"a < {}": "{} > a", "“b” & c": "„b“"})
    path.write_text(done, encoding="utf-8")
    translation.update("de", {"new": "x.py", "a < {}": "x.py"}, tmp_path)
    assert translation.read_translations(path) == {"a < {}": "{} > a"}
    path.write_text(done.replace("{} &gt; a", "a"), encoding="utf-8")
    with pytest.raises(ValueError, match="other places for values"):
        translation.update("de", first, tmp_path)


@pytest.mark.parametrize(
    ("message", "words", "fits"),
    [
        ("{} of {}", "{1} von {0}", True),
        ("{:.2f} m", "{:.2f} m", True),
        ("{} of {}", "{} von", False),
        ("{:.2f} m", "{} m", False),
        ("none", "keine {", False),
    ],
)
def test_a_translation_takes_the_values_of_its_message(translation, message, words, fits):
    assert (translation.broken_translations({message: words}) == []) == fits


def test_every_language_that_ships_fits_the_code(translation, provider):
    known = {**translation.messages_of_code(), **translation.messages_of_models()}
    for path in translation.FOLDER.glob("*.ts"):
        translations = translation.read_translations(path)
        assert translation.broken_translations(translations) == []
        assert set(translations) <= set(known), f"python tools/translation.py {path.stem[11:]}"


RELOAD = """
import json, os, sys
sys.path.insert(0, sys.argv[1])
from qgis.core import QgsApplication
from qgis.PyQt.QtCore import QCoreApplication
from qgis.core import QgsSettings
application = QgsApplication([], True)
application.initQgis()
QgsSettings().setValue("locale/overrideFlag", True)
QgsSettings().setValue("locale/userLocale", "de_AT")

def said():
    return QCoreApplication.translate("Steadfield", "Safe release")
seen = [said()]
for turn in range(2):
    import steadfield
    plugin = steadfield.classFactory(None)
    plugin.initProcessing()
    algorithm = QgsApplication.processingRegistry().algorithmById("steadfield:safehexagons")
    model = QgsApplication.processingRegistry().algorithmById("steadfield:advisedsurface")
    seen.append([algorithm.group(), algorithm.displayName(), model.displayName()])
    del algorithm, model
    plugin.unload()
    seen.append([said(), QgsApplication.processingRegistry().providerById("steadfield") is None])
    for name in [one for one in sys.modules if one.split(".")[0] == "steadfield"]:
        del sys.modules[name]
    # the next version of the plugin brings no translation
    if turn == 0:
        os.remove(os.path.join(sys.argv[1], "steadfield", "plugin", "i18n", "steadfield_de.qm"))
print(json.dumps(seen))
os._exit(0)
"""


def test_a_translation_is_there_before_the_words_and_gone_after_unloading(translation, tmp_path):
    """German for an Austrian host, by Qt's own compiler of translations."""
    if translation.compiler() is None:
        pytest.skip("needs lrelease")
    plugin = tmp_path / "steadfield"
    for part in ("plugin", "algorithms", "icons"):
        leave = shutil.ignore_patterns("__pycache__", "help")
        shutil.copytree(ROOT / part, plugin / part, ignore=leave)
    shutil.copy(ROOT / "__init__.py", plugin)
    shutil.copy(ROOT / "metadata.txt", plugin)
    words = {
        "Safe release": "Sichere Weitergabe",
        "Disclosure-safe hexagons": "Sechsecke, die niemanden verraten",
        "Advised density surface with outlines": "Dichte mit Umrissen",
    }
    (plugin / "plugin" / "i18n").mkdir(exist_ok=True)
    path = plugin / "plugin" / "i18n" / "steadfield_de.ts"
    path.write_text(translation.ts_text(dict.fromkeys(words, "a.py"), "", "de", words), "utf-8")
    translation.compile_translation(path)
    script = tmp_path / "reload.py"
    script.write_text(RELOAD, "utf-8")
    command = [sys.executable, str(script), str(tmp_path)]
    profile = {"QGIS_CUSTOM_CONFIG_PATH": str(tmp_path), "QT_QPA_PLATFORM": "offscreen"}
    done = subprocess.run(
        command, env={**os.environ, **profile}, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    english = list(words)
    assert json.loads(done.stdout.splitlines()[-1]) == [
        "Safe release",
        list(words.values()),
        ["Safe release", True],
        english,
        ["Safe release", True],
    ]


@pytest.mark.parametrize(
    ("locale", "chosen"),
    [
        ("de", "de"), ("de_AT", "de"), ("de-CH", "de"), ("pt_BR", "pt_BR"), ("pt_PT", None),
        ("sr_RS@latin", "sr"), ("en_GB", None), ("d", None), ("", None), ("C", None),
    ],
)  # fmt: skip
def test_the_nearest_translation_is_chosen(tmp_path, locale, chosen):
    for name in ("de", "pt_BR", "sr"):
        (tmp_path / f"steadfield_{name}.qm").touch()
    found = translation_file(locale, tmp_path)
    assert (found and found.stem[len("steadfield_") :]) == chosen


def test_a_package_takes_translations_with_their_source_only(translation, tmp_path, monkeypatch):
    import package

    there = package.contents()
    for name in ("steadfield_de.qm", "steadfield_de.ts", "steadfield_fr.qm", "other.qm"):
        (tmp_path / name).touch()
        there.append((tmp_path / name, f"steadfield/plugin/i18n/{name}"))
    monkeypatch.setattr(package, "contents", lambda: there)
    assert package.problems() == [
        "steadfield/plugin/i18n/steadfield_fr.qm comes without its source, the .ts file",
        "steadfield/plugin/i18n/other.qm is of a kind that does not belong into the package",
    ]


# --- lists of numbers as they are typed in different countries


class _Typed(Settings):
    """Settings whose only parameter is a text."""

    def __init__(self, text):
        self.warnings = []
        self._text = text

    def words(self, name):
        return self._text

    def label(self, name):
        return f"Cell sizes ({name})"


@pytest.mark.parametrize(
    ("text", "numbers"),
    [
        ("", []),
        ("400, 800", [400, 800]),
        ("100, 200; 400", [100, 200, 400]),
        ("100 200\t400", [100, 200, 400]),
        ("25,50,75,95", [25, 50, 75, 95]),
        ("100,200,400", [100, 200, 400]),
        ("0.5,1.25", [0.5, 1.25]),
        ("0.5; 1", [0.5, 1]),
        ("0.125, 1.125", [0.125, 1.125]),
        (" 500 ,", [500]),
        ("1e3; -2", [1000, -2]),
    ],
)
def test_a_list_of_numbers_is_read_as_it_stands(text, numbers):
    assert _Typed(text).numbers("CELL_SIZES") == numbers


# decimal commas, points and commas between thousands: each is another number elsewhere
@pytest.mark.parametrize(
    "text",
    ["0,5; 1", "0,5", "2,5 5", "12,5; 25,0", "400,800", "1,000", "1,000,000", "1.000; 2.500",
     "1.234,5", "2,5,05"],
)  # fmt: skip
def test_what_is_another_number_elsewhere_is_refused_with_the_parameter_named(text):
    with pytest.raises(InputError, match=r"^Cell sizes \(CELL_SIZES\): “.*0\.5; 1200"):
        _Typed(text).numbers("CELL_SIZES")


def test_a_number_typed_with_a_decimal_comma_in_place_of_a_value_is_refused(run, point_layer):
    records = point_layer([0, 500, 900.0], [0, 100, 700.0])
    given = {"RECORDS": records, "BANDWIDTH": "0,5", "DENSITY": "TEMPORARY_OUTPUT"}
    with pytest.raises(QgsProcessingException, match="BANDWIDTH"):
        run("adaptivedensity", given)
