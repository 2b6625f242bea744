"""What a release audit reads: published layers, their count fields, and what each count says."""

import re
from dataclasses import dataclass

import numpy as np
from qgis.core import QgsProcessingFeatureSource

from ..plugin import layers as vector_layers
from ..plugin.host import BIG_INTEGER, INTEGER, REAL, TEXT
from ..plugin.text import number, said, tr
from .numeric import intervals
from .numeric.differencing import PublishedTable
from .numeric.errors import InputError

COUNT_NAMES = ("count", "records", "number", "total", "n", "cases", "persons", "residents")
LABEL_NAMES = ("name", "label", "ward", "zone", "region", "cell", "code", "id")
ROW_NUMBERS = ("fid", "ogc_fid", "objectid", "gid")
NO_VALUE = ("", "none", "null", "nan", "withheld")
MOST_LAYERS = 8
KINDS = re.compile(
    r"(?P<kind>exact|rounded|nearest|noise)\s*(?P<size>[0-9.]+)?"
    r"(\s*,?\s*withheld below\s+(?P<threshold>[0-9]+))?"
)


@dataclass(frozen=True)
class Published:
    """One published layer and how it was read.

    Attributes
    ----------
    table : numeric.differencing.PublishedTable
    values : (zones,) float array
        As published; NaN where withheld.
    field : str
    kind : str
        What its counts are, in words.
    """

    table: PublishedTable
    values: np.ndarray
    field: str
    kind: str


def read_releases(job):
    """All published layers in the working CRS, which the first one settles.

    Returns
    -------
    list of Published
    """
    name = "RELEASES"
    chosen = job.layer_list(name)
    if not 1 <= len(chosen) <= MOST_LAYERS:
        raise InputError(
            tr("{}: 1 to {} layers are wanted; found {}.").format(
                job.label(name), MOST_LAYERS, len(chosen)
            )
        )
    names = job.layer_names(name)
    first = QgsProcessingFeatureSource(chosen[0], job.context)
    job.settle_working_crs(first, name, chosen[0].name())
    pieces = {
        key: _pieces(job, key, len(chosen))
        for key in ("COUNT_FIELDS", "KINDS", "TOTALS", "RELEASE_ORDER", "LABEL_FIELDS")
    }
    orders = [_order(job, piece) for piece in pieces["RELEASE_ORDER"]]
    return [
        _read(job, layer, names[place], orders[place], {k: v[place] for k, v in pieces.items()})
        for place, layer in enumerate(chosen)
    ]


def _pieces(job, key, count):
    """One text per layer; none given means empty, one given for KINDS means the same for all."""
    text = job.words(key)
    pieces = [piece.strip() for piece in text.split(";")] if text else [""] * count
    if len(pieces) == 1 and key == "KINDS":
        pieces = pieces * count
    if len(pieces) != count:
        raise InputError(
            tr("{}: one entry for each of the {} layers is wanted, apart by semicolons; found {}.")
            .format(job.label(key), count, len(pieces))
        )  # fmt: skip
    return pieces


def _order(job, piece):
    if piece and not re.fullmatch(r"\d+", piece):
        raise InputError(
            tr("{}: whole numbers are wanted; found “{}”.").format(
                job.label("RELEASE_ORDER"), piece
            )
        )
    return int(piece or 0)


def _read(job, layer, name, order, given):
    count_field = _count_field(job, layer, name, given["COUNT_FIELDS"])
    label_field = _label_field(job, layer, name, given["LABEL_FIELDS"], count_field)
    wanted = [count_field] + ([label_field] if label_field else [])
    source = QgsProcessingFeatureSource(layer, job.context)
    with job.naming("RELEASES", name):
        found = vector_layers.read_polygons(
            layer, source, job.working.crs, job.context.transformContext(), wanted
        )
    job.progress(0.0)
    for reason, count in found.skipped.items():
        job.warn(tr("{}: {} zones {} were left out.").format(name, number(count), reason))
    if not len(found):
        raise InputError(
            tr("{}: the layer {} has no usable polygon; take it off the list.").format(
                job.label("RELEASES"), name
            )
        )
    if found.skipped and given["TOTALS"]:
        raise InputError(
            tr(
                "{}: {} has zones without usable ground, whose counts are part of its total; "
                "repair or remove them, or leave the total out."
            ).format(job.label("TOTALS"), name)
        )
    values = vector_layers.as_floats(found.values[count_field])
    _refuse_words(job, name, count_field, found.values[count_field], values)
    if np.isnan(values).all():
        raise InputError(
            tr("{}: the field {} of {} holds no number; choose another field.").format(
                job.label("COUNT_FIELDS"), count_field, name
            )
        )
    labels = found.values[label_field] if label_field else np.arange(1, len(values) + 1)
    lower, upper, total, words = _statement(job, name, values, given["KINDS"], given["TOTALS"])
    table = PublishedTable(
        name, found.geometry, lower, upper, tuple(str(label) for label in labels), total, order
    )
    job.inform(tr("{}: counts in {}, {}").format(name, count_field, words))
    return Published(table, values, count_field, words)


def _refuse_words(job, name, field, raw, values):
    """A text that is no number, such as “1,250” or “<5”, tells more than a withheld count."""
    words = [str(raw[row]).strip() for row in np.flatnonzero(np.isnan(values))]
    told = [word for word in words if word.lower() not in NO_VALUE]
    if told:
        raise InputError(
            tr(
                "{}: the field {} of {} holds “{}”, which is neither a number nor empty; write "
                "counts as plain numbers, and null where a count is withheld."
            ).format(job.label("COUNT_FIELDS"), field, name, told[0])
        )


def _count_field(job, layer, name, given):
    """The field that was named, the one whose name says that it is a count, or the only one."""
    fields = {field.name(): field.type() for field in layer.fields()}
    if given:
        if given not in fields:
            raise InputError(
                tr("{}: {} has no field {}; its fields are {}.").format(
                    job.label("COUNT_FIELDS"), name, given, ", ".join(fields)
                )
            )
        return given
    numeric = [
        field
        for field, kind in fields.items()
        if kind in (INTEGER, BIG_INTEGER, REAL) and field.lower() not in ROW_NUMBERS
    ]
    for wanted in COUNT_NAMES:
        named = [field for field in numeric if field.lower() == wanted]
        if named:
            return named[0]
    if len(numeric) == 1:
        return numeric[0]
    choices = ", ".join(numeric) or tr("its fields, of which none is a number")
    raise InputError(
        tr("{}: it is not clear which field of {} holds the counts; name one of {}.").format(
            job.label("COUNT_FIELDS"), name, choices
        )
    )


def _label_field(job, layer, name, given, count_field):
    fields = {field.name(): field.type() for field in layer.fields()}
    if given:
        if given not in fields:
            raise InputError(
                tr("{}: {} has no field {}; its fields are {}.").format(
                    job.label("LABEL_FIELDS"), name, given, ", ".join(fields)
                )
            )
        return given
    candidates = [field for field in fields if field != count_field]
    for wanted in LABEL_NAMES:
        for field in candidates:
            if field.lower() == wanted:
                return field
    texts = [field for field in candidates if fields[field] == TEXT]
    return texts[0] if texts else None


def _statement(job, name, values, kind, total):
    """Bounds that counts of one kind leave, those of the published total, and the kind in words."""
    parsed = KINDS.fullmatch(kind.lower() or "exact")
    if not parsed or (parsed["kind"] == "exact") != (parsed["size"] is None):
        raise InputError(
            tr(
                "{}: “{}” for {} is not understood; write exact, rounded 5 (at random), nearest 5 "
                "or noise 0.5, each with “, withheld below 10” where that rule is known."
            ).format(job.label("KINDS"), kind, name)
        )
    size = float(parsed["size"] or 0)
    kinds = {
        "exact": (intervals.exact, tr("exact")),
        "rounded": (lambda v: intervals.rounded(v, size), tr("rounded at random to {}")),
        "nearest": (lambda v: intervals.rounded(v, size, False), tr("rounded to the nearest {}")),
        "noise": (lambda v: intervals.noisy(v, size), tr("with noise of budget {}")),
    }
    bounds, words = kinds[parsed["kind"]]
    words = words.format(f"{size:g}")
    try:
        published_total = _total(job, name, total)
        lower, upper = bounds(values)
        sums = None if published_total is None else tuple(v[0] for v in bounds([published_total]))
        if parsed["threshold"]:
            threshold = int(parsed["threshold"])
            lower, upper = intervals.below_threshold(values, lower, upper, threshold)
            words += tr(", withheld below {}").format(threshold)
    except InputError as error:
        raise InputError(f"{name}: {said(error)}") from error
    return lower, upper, sums, words


def _total(job, name, piece):
    if not piece:
        return None
    try:
        return float(piece)
    except ValueError:
        raise InputError(
            tr("{}: a number is wanted; found “{}”.").format(job.label("TOTALS"), piece)
        ) from None
