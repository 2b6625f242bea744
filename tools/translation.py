"""Gather the words of the plugin for translators: ``python tools/translation.py [LANGUAGE ...]``.

Without a language the template goes to build/steadfield.ts. With one, such as ``de``,
plugin/i18n/steadfield_de.ts is made or brought up to date, what is translated already stays, and it
is compiled where lrelease is there.
"""

import ast
import os
import shutil
import string
import subprocess
import sys
from collections import Counter
from pathlib import Path
from xml.etree import ElementTree
from xml.sax.saxutils import escape

ROOT = Path(__file__).resolve().parent.parent
FOLDER = ROOT / "plugin" / "i18n"
TEMPLATE = ROOT / "build" / "steadfield.ts"
CONTEXT = "Steadfield"
COMPILERS = ("lrelease", "lrelease-qt5", "lrelease6", "/usr/lib/qt6/bin/lrelease")
HOUSE = (
    ("plugin", {"tr"}),
    ("algorithms", {"tr"}),
    ("algorithms/numeric", {"Words", "InputError"}),
)
# these hand on what others give them
CARRIERS = ("plugin/text.py", "plugin/ready_models.py", "algorithms/numeric/words.py",
            "algorithms/numeric/errors.py")  # fmt: skip


def messages_of_code(root=ROOT):
    """Messages of the modules, in the order of files and lines.

    Returns
    -------
    dict of str to str
        Message to the first file that says it.

    Raises
    ------
    ValueError
        When a message is put together while the plugin runs, so that none could translate it.
    """
    found = {}
    for folder, callers in HOUSE:
        for path in sorted((root / folder).glob("*.py")):
            name = path.relative_to(root).as_posix()
            for message in messages_of_module(path.read_text(encoding="utf-8"), name, callers):
                found.setdefault(message, name)
    return found


def messages_of_module(text, name, callers):
    """Literal first arguments of calls of ``callers``, in the order of lines."""
    calls = [
        node
        for node in ast.walk(ast.parse(text))
        if isinstance(node, ast.Call)
        and isinstance(node.func, ast.Name)
        and node.func.id in callers
    ]
    found = []
    for call in sorted(calls, key=lambda call: (call.lineno, call.col_offset)):
        # strings side by side are one already
        argument = call.args[0] if call.args else None
        if isinstance(argument, ast.Constant) and isinstance(argument.value, str):
            found.append(argument.value)
        elif name not in CARRIERS:
            raise ValueError(
                f"{name}, line {call.lineno}: {call.func.id} takes a literal text; put values in "
                "afterwards."
            )
    return found


def placeholders(message):
    """What is put into a message, as `str.format` reads it: a count of each field."""
    fields = Counter()
    place = 0
    try:
        for _, field, spec, conversion in string.Formatter().parse(message):
            if field is None:
                continue
            if not field:
                field, place = str(place), place + 1
            fields[field, spec, conversion] += 1
    except ValueError:
        return None
    return fields


def broken_translations(translations):
    """Messages whose translation would not take the values of the original, in words."""
    return [
        f"“{message}”: the translation has other places for values: “{words}”"
        for message, words in translations.items()
        if words and placeholders(message) != placeholders(words)
    ]


def read_translations(path):
    """Message to translation of a .ts file; unfinished and empty ones are left out."""
    found = {}
    for message in ElementTree.parse(path).iter("message"):
        translation = message.find("translation")
        if translation is not None and translation.get("type") is None and translation.text:
            found[message.findtext("source")] = translation.text
    return found


def ts_text(messages, above, language="", translations=()):
    """A file in Qt's format of translations.

    Parameters
    ----------
    messages : dict of str to str
        Message to the file that says it.
    above : str
        The way from the folder of the .ts file to the checkout, such as ``../``.
    language : str
    translations : dict of str to str

    Returns
    -------
    str
    """
    translations = dict(translations)
    attribute = f' language="{language}"' if language else ""
    lines = [
        '<?xml version="1.0" encoding="utf-8"?>',
        "<!DOCTYPE TS>",
        f'<TS version="2.1"{attribute} sourcelanguage="en_GB">',
        f"<context>\n    <name>{CONTEXT}</name>",
    ]
    for message, name in messages.items():
        done = translations.get(message)
        translation = (
            f"<translation>{escape(done)}</translation>"
            if done
            else '<translation type="unfinished"></translation>'
        )
        lines.append(
            f'    <message>\n        <location filename="{above}{name}"/>\n'
            f"        <source>{escape(message)}</source>\n        {translation}\n    </message>"
        )
    return "\n".join([*lines, "</context>", "</TS>", ""])


def compiler():
    """Qt's compiler of translations, None where it is not there."""
    found = filter(None, map(shutil.which, COMPILERS))
    return next(found, None)


def compile_translation(path):
    """Compile a .ts file beside it; returns the path, None without a compiler."""
    program = compiler()
    if program is None:
        return None
    target = path.with_suffix(".qm")
    command = [program, str(path), "-qm", str(target)]
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
    return target


def messages_of_models():
    """Messages of the ready models; a host with the provider must be running."""
    from qgis.core import QgsProcessingModelAlgorithm
    from steadfield.plugin.ready_models import FOLDER as MODELS
    from steadfield.plugin.ready_models import words_of

    found = {}
    for path in sorted(MODELS.glob("*.model3")):
        model = QgsProcessingModelAlgorithm()
        if not model.fromFile(str(path)):
            raise OSError(f"{path.name}: the model cannot be read.")
        for message in words_of(model):
            found.setdefault(message, path.relative_to(ROOT).as_posix())
    return found


def update(language, messages, folder=FOLDER):
    """Make a language's file or bring it up to date; returns its path."""
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / f"steadfield_{language}.ts"
    translations = read_translations(path) if path.exists() else {}
    path.write_text(ts_text(messages, "../../", language, translations), encoding="utf-8")
    wrong = broken_translations(read_translations(path))
    if wrong:
        raise ValueError("\n".join([path.name, *wrong]))
    return path


def main(languages):
    os.environ["LANGUAGE"] = os.environ["LC_ALL"] = "C"
    from headless import Host

    host = Host()
    messages = messages_of_code()
    for message, name in messages_of_models().items():
        messages.setdefault(message, name)
    if not languages:
        TEMPLATE.parent.mkdir(exist_ok=True)
        TEMPLATE.write_text(ts_text(messages, "../"), encoding="utf-8")
        print(f"{TEMPLATE.relative_to(ROOT)}: {len(messages)} messages")
    for language in languages:
        path = update(language, messages)
        compiled = compile_translation(path)
        made = compiled.name if compiled else "not compiled: no lrelease here"
        print(
            f"{path.relative_to(ROOT)}: {len(read_translations(path))} of {len(messages)}; {made}"
        )
    host.leave()


if __name__ == "__main__":
    main(sys.argv[1:])
