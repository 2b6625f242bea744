"""Puts the words of the plugin into the host's language, where a translation is there."""

from pathlib import Path

from qgis.core import QgsApplication
from qgis.PyQt.QtCore import QCoreApplication, QTranslator

FOLDER = Path(__file__).resolve().parent / "i18n"


def translation_file(locale, folder=FOLDER):
    """The compiled translation for a locale; that of the language serves where it has none.

    Parameters
    ----------
    locale : str
        Such as ``de_AT``, ``de-AT`` or ``sr_RS@latin``.
    folder : pathlib.Path

    Returns
    -------
    pathlib.Path or None
    """
    whole = locale.replace("-", "_")
    plain = whole.split("@")[0].split(".")[0]
    for name in (whole, plain, plain.split("_")[0]):
        path = folder / f"steadfield_{name}.qm"
        if path.is_file():
            return path
    return None


def install_translator(folder=FOLDER):
    """Translate what is said from now on; None where there is no translation to load.

    Names and help of the algorithms are put together when their modules are imported, so this has
    to come first.
    """
    path = translation_file(QgsApplication.locale(), folder)
    if path is None:
        return None
    translator = QTranslator()
    if not translator.load(str(path)):
        return None
    QCoreApplication.installTranslator(translator)
    return translator


def remove_translator(translator):
    """Take away what `install_translator` gave."""
    if translator is not None:
        QCoreApplication.removeTranslator(translator)
