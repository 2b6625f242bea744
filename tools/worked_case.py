"""Figures of the worked case, from the results of the demo, and the texts that they go into.

The demo writes figures.json into its folder; help_pictures.py keeps it beside the texts as
tools/help_texts/worked_case.json; help_pages.py puts the figures into the page and the README. No
figure of the case is typed in.
"""

import csv
import json
import re
from collections import Counter

from help_parts import TEXTS, stored


def filled(name):
    """A text of the worked case with the figures of the demo in their places."""
    text = (TEXTS / name).read_text(encoding="utf-8").strip()
    figures = stored("worked_case")
    return re.sub(r"\{(\w+)\}", lambda found: figures[found.group(1)], text)


def write_figures(folder, done):
    """Write figures.json into the demo's folder.

    Parameters
    ----------
    folder : pathlib.Path
    done : dict
        Results of the demo's steps, by name.
    """
    words = {
        **_district(done),
        **_surface(done),
        **_ratio(done),
        **_cut(done),
        **_release(done),
    }
    check_story(done, words)
    text = json.dumps(words, ensure_ascii=False, indent=1) + "\n"
    (folder / "figures.json").write_text(text, encoding="utf-8")


def check_story(done, words):
    """Refuse results that the sentences of the worked case do not fit.

    Raises
    ------
    RuntimeError
        The text in tools/help_texts has to be written anew.
    """
    told = {
        "records without faults": done["check"]["FAULTS"] == 0,
        "areas raised over the whole map": done["ratio"]["P_RAISED"] <= 0.05,
        "none lowered": done["ratio"]["P_LOWERED"] > 0.05,
        "the worst ward by chance alone": words["worst_ward"] not in words["areas"],
        "units that hold, none of them in the worst ward": bool(words["holding_names"])
        and words["worst_ward"] not in words["holding_names"],
        "a clean audit": done["audit"]["CLEAN"] == 1,
        "a second release that discloses": done["second audit"]["DISCLOSED_REGIONS"] > 0,
    }
    missing = [part for part, holds in told.items() if not holds]
    if missing:
        raise RuntimeError(f"the worked case tells of {missing}, which the demo has not shown")


def _rows(path, table=None):
    """Fields of each feature of a table, with its polygon under ``shape``."""
    import shapely
    from osgeo import ogr

    source = ogr.Open(path)
    layer = source.GetLayer(table) if table else source.GetLayer(0)
    return [
        {
            **feature.items(),
            "shape": shapely.from_wkb(bytes(feature.GetGeometryRef().ExportToWkb())),
        }
        for feature in layer
    ]


def _practice(done, table):
    return _rows(done["table"].split("|layername=")[0], table)


def _district(done):
    from steadfield.plugin.text import number

    wards = _practice(done, "care_wards")
    highest, second = sorted(wards, key=lambda ward: -ward["rate"])[:2]
    falls = sum(ward["falls"] for ward in wards)
    residents = sum(ward["residents"] for ward in wards)
    check = done["check"]
    return {
        "falls": number(falls),
        "residents": number(residents),
        "wards": number(len(wards)),
        "overall_rate": number(1000 * falls / residents),
        "worst_ward": highest["ward"],
        "worst_rate": number(highest["rate"]),
        "worst_falls": number(highest["falls"]),
        "worst_residents": number(highest["residents"]),
        # of a Poisson count its square root is the standard deviation
        "worst_error": number(1000 * highest["falls"] ** 0.5 / highest["residents"], 2),
        "second_ward": second["ward"],
        "second_rate": number(second["rate"]),
        "faults": number(check["FAULTS"]) if check["FAULTS"] else "no",
        "fullest": number(check["FULLEST_SPOT"]),
    }


def _surface(done):
    from steadfield.plugin.text import number

    advice, density = done["advice"], done["density"]
    return {
        "least_squares": number(advice["LEAST_SQUARES_CV"]),
        "likelihood": number(advice["LIKELIHOOD_CV"]),
        "advised": number(advice["ADVISED"]),
        "normal_scale": number(advice["NORMAL_SCALE"]),
        "bandwidth": number(density["BANDWIDTH_USED"]),
        "peak": number(density["PEAK"]),
    }


def _ratio(done):
    from steadfield.plugin.text import listed, number

    wards = _practice(done, "care_wards")
    areas = [
        area
        for area in _rows(done["ratio"]["OUTLINES"])
        if area["finding"] == "raised over the whole map"
    ]
    areas.sort(key=lambda area: area["rank"])
    found = [
        f"{number(area['records'])} falls where {number(area['expected'])} are expected, in "
        + listed(_names(area["shape"], wards))
        for area in areas
    ]
    return {
        "relabellings": number(done["ratio relabellings"]),
        "p_raised": number(done["ratio"]["P_RAISED"]),
        "p_lowered": number(done["ratio"]["P_LOWERED"]),
        "areas_raised": number(len(areas)),
        "areas": "; ".join(found),
    }


def _names(shape, wards):
    """Wards that hold a tenth of an area or more, the largest part first."""
    parts = [(ward["shape"].intersection(shape).area, ward["ward"]) for ward in wards]
    return [name for part, name in sorted(parts, reverse=True) if part >= 0.1 * shape.area]


def _cut(done):
    from steadfield.plugin.text import listed, number, percent

    grid, units = done["grid"], done["units"]
    with open(grid["TABLE"], encoding="utf-8", newline="") as file:
        rows = [row for row in csv.DictReader(file) if row["statistic"] == "largest"]
    with open(units["TABLE"], encoding="utf-8", newline="") as file:
        (official,) = [
            row
            for row in csv.DictReader(file)
            if row["statistic"] == "largest" and row["official_place"]
        ]
    residents, in_truth, rates = _holding(done)
    average = min(residents, key=rates.get)
    low, high = min(rows, key=_middle), max(rows, key=_middle)
    return {
        "sizes": number(len(rows)),
        "smallest_size": number(float(rows[0]["cell_size"])),
        "largest_size": number(float(rows[-1]["cell_size"])),
        "zonings": number(sum(int(row["replicates"]) for row in rows)),
        "lowest_high": number(_middle(low)),
        "highest_high": number(_middle(high)),
        "grid_above": percent(grid["SHARE_ABOVE"]),
        "grid_open": percent(1 - grid["SHARE_ABOVE"] - grid["SHARE_BELOW"]),
        "units": number(units["UNITS_ABOVE"] + units["UNITS_BELOW"] + units["UNITS_DEPEND"]),
        "units_above": number(units["UNITS_ABOVE"]),
        "units_open": percent(1 - units["SHARE_ABOVE"] - units["SHARE_BELOW"]),
        "holding": listed([f"{ward} ({number(many)})" for ward, many in residents.most_common()]),
        "holding_names": listed([ward for ward, _ in residents.most_common()]),
        "hidden_ward": average,
        "hidden_rate": number(rates[average]),
        "in_truth": percent(in_truth, 0),
        "official_below": percent(float(official["official_place"]), 0),
        "budget": percent(done["budget"], 0),
        "reached": number(units["EVENTS_REACHED"]),
        "between": number(units["EVENTS_BETWEEN_ZONINGS"]),
    }


def _middle(row):
    return float(row["q50"])


def _holding(done):
    """Residents of units that hold above by ward, their share in true areas, rates of the wards."""
    truth = [area["shape"] for area in _practice(done, "true_risk_areas")]
    rates = {ward["ward"]: ward["rate"] for ward in _practice(done, "care_wards")}
    holding = [unit for unit in _rows(done["units"]["UNITS_OUT"]) if unit["verdict"] == 1]
    by_ward, inside = Counter(), 0
    for unit in holding:
        by_ward[unit["ward"]] += unit["residents"]
        middle = unit["shape"].representative_point()
        inside += unit["residents"] * any(area.contains(middle) for area in truth)
    return by_ward, inside / max(sum(by_ward.values()), 1), rates


def _release(done):
    from steadfield.plugin.text import number, percent

    safe, audit = done["safe"], done["audit"]
    records = safe["RECORDS_RELEASED"] + safe["RECORDS_MERGED"] + safe["RECORDS_WITHHELD"]
    return {
        "least_count": number(done["least count"]),
        "hexagon_size": number(safe["HEXAGON_SIZE_USED"]),
        "cells_released": number(safe["CELLS_RELEASED"]),
        "cells_withheld": number(safe["CELLS_WITHHELD"]),
        "records_released": percent(safe["RECORDS_RELEASED"] / records),
        "rank_kept": number(safe["RANK_CORRELATION"], 2),
        "audit": "clean" if audit["CLEAN"] == 1 else "not clean",
        "second_disclosed": number(done["second audit"]["DISCLOSED_REGIONS"]),
        "second_size": number(done["second safe"]["HEXAGON_SIZE_USED"]),
    }
