"""A ready model drawn for its help page: boxes where the designer shows them, and their links."""

import html
import re
from textwrap import wrap

MARGIN = 12
LETTERS = 25
LINE = 18
FILLS = {"input": "#f6e7c6", "step": "#dfe9ee", "output": "#e3ecd9"}
STROKES = {"input": "#b28a3a", "step": "#1d4763", "output": "#56793d"}


def drawing(model):
    """The model as SVG.

    Parameters
    ----------
    model : QgsProcessingModelAlgorithm

    Returns
    -------
    str
    """
    boxes = {**_inputs(model), **_steps(model), **_outputs(model)}
    left = min(box[0] for box in boxes.values()) - MARGIN
    top = min(box[1] for box in boxes.values()) - MARGIN
    width = max(box[0] + box[2] for box in boxes.values()) + MARGIN - left
    height = max(box[1] + box[3] for box in boxes.values()) + MARGIN - top
    lines = [_line(boxes[start], boxes[stop]) for start, stop in _links(model) if start in boxes]
    shapes = [_box(*box) for box in boxes.values()]
    return (
        f'<svg class="drawing" xmlns="http://www.w3.org/2000/svg" width="{width:.0f}" '
        f'height="{height:.0f}" viewBox="{left:.0f} {top:.0f} {width:.0f} {height:.0f}" '
        'font-family="Noto Sans, Helvetica, Arial, sans-serif" font-size="17">\n'
        '<defs><marker id="tip" viewBox="0 0 8 8" refX="8" refY="4" markerWidth="7" '
        'markerHeight="7" orient="auto"><path d="M0 0L8 4L0 8z" fill="#7c8188"/></marker></defs>\n'
        + "\n".join([*lines, *shapes])
        + "\n</svg>"
    )


def _placed(component, kind, words):
    """(left, top, width, height, kind, words); a position is the middle of a box."""
    place, size = component.position(), component.size()
    width, height = size.width(), max(size.height(), 46.0)
    return place.x() - width / 2, place.y() - height / 2, width, height, kind, words


def _inputs(model):
    components = model.parameterComponents()
    return {
        ("input", name): _placed(one, "input", model.parameterDefinition(name).description())
        for name, one in components.items()
    }


def _steps(model):
    return {
        ("step", name): _placed(one, "step", one.description())
        for name, one in model.childAlgorithms().items()
    }


def _outputs(model):
    return {
        ("output", f"{name}:{title}"): _placed(output, "output", title)
        for name, one in model.childAlgorithms().items()
        for title, output in one.modelOutputs().items()
    }


def sources_of(model, step):
    """What flows into a step: pairs (``input``, parameter) and (``step``, earlier step)."""
    found = set()
    for sources in step.parameterSources().values():
        # as stored, because the names of the kinds differ between host versions
        for one in (source.toVariant() for source in sources):
            if one.get("parameter_name"):
                found.add(("input", one["parameter_name"]))
            if one.get("child_id"):
                found.add(("step", one["child_id"]))
            names = re.findall(r"@(\w+)", one.get("expression") or "")
            found.update(("input", n) for n in names if n in model.parameterComponents())
    found.update(("step", before.childId) for before in step.dependencies())
    return sorted(found)


def _links(model):
    for name, step in model.childAlgorithms().items():
        for source in sources_of(model, step):
            yield source, ("step", name)
        for title in step.modelOutputs():
            yield ("step", name), ("output", f"{name}:{title}")


def _line(start, stop):
    """An arrow from a box to another: downwards, across, or under what lies between."""
    middle, bottom = start[0] + start[2] / 2, start[1] + start[3]
    if stop[1] > bottom:
        target, half = stop[0] + stop[2] / 2, (bottom + stop[1]) / 2
        return _arrow((middle, bottom), (middle, half), (target, half), (target, stop[1]))
    rightwards = stop[0] > start[0]
    flank = stop[0] if rightwards else stop[0] + stop[2]
    level = stop[1] + stop[3] / 2
    near = start[0] + start[2] if rightwards else start[0]
    if abs(flank - near) < 0.5 * stop[2]:
        half = (near + flank) / 2
        own = start[1] + start[3] / 2
        return _arrow((near, own), (half, own), (half, level), (flank, level))
    under = max(bottom, stop[1] + stop[3]) + 30
    before = flank - 40 if rightwards else flank + 40
    return _arrow((middle, bottom), (middle, under), (before, under), (flank, level + 12))


def _arrow(*places):
    (x1, y1), *rest = places
    curve = " ".join(f"{x:.0f} {y:.0f}" for x, y in rest)
    return (
        f'<path d="M{x1:.0f} {y1:.0f}C{curve}" fill="none" stroke="#7c8188" '
        'marker-end="url(#tip)"/>'
    )


def _box(left, top, width, height, kind, words):
    lines = wrap(words, LETTERS)
    first = top + height / 2 + 6 - LINE / 2 * (len(lines) - 1)
    middle = left + width / 2
    text = "".join(
        f'<text x="{middle:.0f}" y="{first + LINE * place:.0f}" text-anchor="middle" '
        f'fill="#23262b">{html.escape(line)}</text>'
        for place, line in enumerate(lines)
    )
    return (
        f'<rect x="{left:.0f}" y="{top:.0f}" width="{width:.0f}" height="{height:.0f}" rx="5" '
        f'fill="{FILLS[kind]}" stroke="{STROKES[kind]}"/>{text}'
    )
