"""The ready models, each as a diagram: what is asked, which steps follow, what comes out."""

from model_diagram import Diagram, given, result, worked_out
from qgis.core import (
    QgsProcessingParameterBoolean,
    QgsProcessingParameterDistance,
    QgsProcessingParameterFeatureSource,
    QgsProcessingParameterField,
    QgsProcessingParameterNumber,
    QgsProcessingParameterString,
)
from steadfield.plugin.host import METRES, POINTS, POLYGONS

CONFIDENTIAL = "For the custodian's file; not for release."


def points(name, label):
    return QgsProcessingParameterFeatureSource(name, label, [POINTS])


def polygons(name, label, optional=False):
    return QgsProcessingParameterFeatureSource(name, label, [POLYGONS], None, optional)


def field(name, label, parent, optional=True, numeric=True):
    kinds = QgsProcessingParameterField.DataType
    kind = kinds.Numeric if numeric else kinds.Any
    return QgsProcessingParameterField(name, label, None, parent, kind, False, optional)


def length(name, label):
    """A length in metres; empty lets the tool choose."""
    definition = QgsProcessingParameterDistance(name, label, None, "", True, 0.0)
    definition.setDefaultUnit(METRES)
    return definition


def text(name, label, default="", optional=True):
    return QgsProcessingParameterString(name, label, default, False, optional)


def whole(name, label, default, least, most=2**31 - 1):
    kind = QgsProcessingParameterNumber.Type.Integer
    return QgsProcessingParameterNumber(
        name, label, kind, default, default is None, float(least), float(most)
    )


def real(name, label):
    """An optional number that is not negative."""
    kind = QgsProcessingParameterNumber.Type.Double
    return QgsProcessingParameterNumber(name, label, kind, None, True, 0.0)


def seed():
    return whole("SEED", "Seed of the random numbers", None, 0)


SEED_HELP = "The same seed gives the same result. Empty: one is drawn and reported."
BOUNDARY_HELP = "Polygons of the study area; what lies outside gets no value."


def advised_surface():
    """Records, bandwidth advice, adaptive surface, outlines."""
    plan = Diagram(
        "Advised density surface with outlines",
        "Asks Bandwidth advice how far records should be smoothed, makes an adaptive density "
        "surface with just that bandwidth, and outlines the densest ground. The report of the "
        "first step says why this bandwidth; that of the second how sure the surface is.",
    )
    plan.input(points("RECORDS", "Records"), (0, 0), "One point for each record.")
    plan.input(
        field("WEIGHT", "Weight", "RECORDS"), (1, 0), "What a record counts for. Empty: 1 each."
    )
    plan.input(polygons("BOUNDARY", "Boundary", True), (2, 0), BOUNDARY_HELP)
    plan.input(
        text("SHARES", "Shares of the total (%)", "25, 50, 75, 95", False),
        (0, 5.2),
        "The smallest ground that holds each share is outlined.",
    )
    about = {
        "RECORDS": given("RECORDS"),
        "WEIGHT": given("WEIGHT"),
        "BOUNDARY": given("BOUNDARY"),
    }
    plan.step(
        "advice", "steadfield:bandwidthadvice", "Bandwidth advice", (1, 1.2), about,
        [("REPORT", "Report on the bandwidth", (0, 2.2), "Four rules, their curves, one advice.")],
        note="One advised value, in metres, handed on as a number.",
    )  # fmt: skip
    plan.step(
        "surface", "steadfield:adaptivedensity", "Adaptive density surface", (1, 3.2),
        {**about, "BANDWIDTH": result("advice", "ADVISED")},
        [
            ("DENSITY", "Density", (0, 4.2), "Records (or weight) per km²."),
            ("REPORT", "Report on the surface", (2, 4.2), "Picture, bandwidths and errors."),
        ],
        note="BANDWIDTH is what was advised; it is narrower where records are dense.",
    )  # fmt: skip
    plan.step(
        "outlines", "steadfield:densityoutlines", "Density outlines", (1, 5.2),
        {"DENSITY": result("surface", "DENSITY"), "SHARES": given("SHARES")},
        [("OUTLINES", "Outlines", (1, 6.2), "Share, area, peak and rank of each outline.")],
        note="Outlines that hold a share of everything, not a round density.",
    )  # fmt: skip
    return plan.finished()


def _zoning_inputs(plan, row):
    """What both models of zoning variance ask besides counts."""
    plan.input(
        text("ZONE_COUNTS", "Numbers of zones"),
        (0, row),
        "How many zones the units are grouped into, apart by commas. Empty: five numbers.",
    )
    plan.input(
        whole("REPLICATES", "Zonings of each number", 500, 2, 5_000_000),
        (1, row),
        "More make the figures steadier; the time grows in proportion.",
    )
    plan.input(seed(), (3, row), SEED_HELP, advanced=True)
    return {
        "LABEL": given("LABEL"),
        "ZONE_COUNTS": given("ZONE_COUNTS"),
        "REPLICATES": given("REPLICATES"),
        "THRESHOLD": given("THRESHOLD"),
    }


THRESHOLD_HELP = (
    "Value that units are judged against, per 1000 of the total, or per square kilometre without "
    "one. Empty: the overall value of the whole area."
)


def places_that_hold():
    """Base units, zoning variance, those with a verdict."""
    plan = Diagram(
        "Places that hold under any cut",
        "Groups base units into zones at random, again and again, and keeps the units that stand "
        "above the threshold, or below it, however the lines are drawn. A unit that is left out "
        "depends on the cut or on small numbers: a map should not rest on it.",
    )
    plan.input(
        polygons("UNITS", "Base units"), (0, 0), "Small areas with counts; they share borders."
    )
    plan.input(field("COUNT", "Count", "UNITS", False), (1, 0), "Events or members in each unit.")
    plan.input(
        field("TOTAL", "Total", "UNITS"), (2, 0), "What the count is taken over. Empty: area."
    )
    plan.input(
        field("LABEL", "Name of a unit", "UNITS", True, False), (3, 0), "Used in the report."
    )
    shared = _zoning_inputs(plan, 0.8)
    plan.input(real("THRESHOLD", "Threshold"), (2, 0.8), THRESHOLD_HELP)
    plan.input(
        field("OFFICIAL", "Official zoning", "UNITS", True, False),
        (4, 0),
        "The official zone of each unit; it is placed among the simulated ones.",
    )
    plan.step(
        "variance", "steadfield:unitvariance", "Zoning variance from base units", (2, 2.2),
        {
            "UNITS": given("UNITS"),
            "COUNT": given("COUNT"),
            "TOTAL": given("TOTAL"),
            "OFFICIAL": given("OFFICIAL"),
            "SEED": given("SEED"),
            **shared,
        },
        [
            ("UNITS_OUT", "Units with variance", (0, 3.4), "Every unit with figures and verdict."),
            ("TABLE", "Table of statistics", (1, 3.4), "By number of zones and statistic."),
            ("REPORT", "Report on the places", (3, 3.4), "How far the map depends on the cut."),
        ],
        note="Verdict: 1 holds above the threshold, -1 below, 0 depends on the cut or on chance.",
    )  # fmt: skip
    plan.step(
        "hold", "native:extractbyexpression", "Keep what holds", (2, 4.6),
        {"INPUT": result("variance", "UNITS_OUT"), "EXPRESSION": '"verdict" <> 0'},
        [("OUTPUT", "Places that hold", (2, 5.8), "Units with a verdict of 1 or -1.")],
        note='Above only: "verdict" = 1.',
    )  # fmt: skip
    return plan.finished()


def places_that_hold_twice():
    """Base units, zoning variance in two periods, those with the same verdict in both."""
    plan = Diagram(
        "Places that hold in two periods",
        "Asks twice, for counts of two periods, which base units stand above or below the "
        "threshold however the lines are drawn, under the same zonings, and keeps those that do "
        "so in both. What holds in one period only may have been chance.",
    )
    plan.input(
        polygons("UNITS", "Base units"), (0, 0), "Small areas with counts; they share borders."
    )
    for key, words, column in (("FIRST", "first period", 1), ("SECOND", "second period", 3)):
        plan.input(
            field(f"COUNT_{key}", f"Count, {words}", "UNITS", False),
            (column, 0),
            f"Events or members in each unit in the {words}.",
        )
        plan.input(
            field(f"TOTAL_{key}", f"Total, {words}", "UNITS"),
            (column + 1, 0),
            f"What the count of the {words} is taken over. Empty: area.",
        )
    shared = _zoning_inputs(plan, 0.8)
    plan.input(
        field("LABEL", "Name of a unit", "UNITS", True, False), (4, 0.8), "Used in the reports."
    )
    plan.input(
        real("THRESHOLD", "Threshold"), (2, 0.8), THRESHOLD_HELP + " Of each period on its own."
    )
    plan.step(
        "first", "steadfield:unitvariance", "Zoning variance, first period", (1, 2.2),
        {
            "UNITS": given("UNITS"),
            "COUNT": given("COUNT_FIRST"),
            "TOTAL": given("TOTAL_FIRST"),
            "SEED": given("SEED"),
            **shared,
        },
        [("REPORT", "Report, first period", (0, 3.4), "How far its map depends on the cut.")],
    )  # fmt: skip
    plan.step(
        "named", "native:renametablefield", "Set the first verdict aside", (1, 3.4),
        {
            "INPUT": result("first", "UNITS_OUT"),
            "FIELD": "verdict",
            "NEW_NAME": "verdict_first",
        },
        note="The second run gives its own figures these names and adds _in to those of the first.",
        note_place=(1, 4.4),
    )  # fmt: skip
    plan.step(
        "second", "steadfield:unitvariance", "Zoning variance, second period", (3, 3.4),
        {
            "UNITS": result("named", "OUTPUT"),
            "COUNT": given("COUNT_SECOND"),
            "TOTAL": given("TOTAL_SECOND"),
            "SEED": result("first", "SEED_USED"),
            **shared,
        },
        [
            ("UNITS_OUT", "Units with both verdicts", (2, 4.6), "Every unit; verdict_first is of "
             "the first period, verdict of the second."),
            ("REPORT", "Report, second period", (4, 4.6), "How far its map depends on the cut."),
        ],
        note="The seed of the first run: both periods are seen under the same zonings.",
    )  # fmt: skip
    plan.step(
        "hold", "native:extractbyexpression", "Keep what holds in both", (3, 5.8),
        {
            "INPUT": result("second", "UNITS_OUT"),
            "EXPRESSION": '"verdict" <> 0 AND "verdict" = "verdict_first"',
        },
        [("OUTPUT", "Places that hold in both", (3, 6.8), "Units with the same verdict twice.")],
    )  # fmt: skip
    return plan.finished()


def three_layers_together():
    """Three point layers, three surfaces, one picture, zones of agreement."""
    plan = Diagram(
        "Three point layers to zones of agreement",
        "Smooths three point layers into adaptive density surfaces, lays them over each other as "
        "inks in one picture, and names the zones where their dense cores meet, how firmly these "
        "hold, and whether layers that had nothing to do with each other would meet as often.",
    )
    order = (("A", "First"), ("B", "Second"), ("C", "Third"))
    for column, (key, words) in zip((0, 2, 4), order):
        plan.input(points(f"LAYER_{key}", f"{words} layer"), (column, 0), "Point records.")
    plan.input(
        text("NAMES", "Names of the layers"),
        (1, 3.4),
        "For legend and reports, apart by semicolons. Empty: the names of the point layers.",
    )
    plan.input(polygons("BOUNDARY", "Boundary", True), (0.5, 0.9), BOUNDARY_HELP)
    plan.input(
        whole("SHARE", "Share of a layer's total in its core (%)", 50, 1, 99),
        (2, 4.5),
        "The core of a layer is the densest ground that holds this share of it.",
    )
    plan.input(
        whole("LEAST_LAYERS", "Least number of cores that meet", 2, 1, 3),
        (2, 5.0),
        "A zone is where so many cores overlap.",
    )
    plan.input(
        length("BANDWIDTH", "Bandwidth"),
        (3, 0.9),
        "Of all three surfaces. Empty: each is chosen from its own records.",
        advanced=True,
    )
    plan.input(seed(), (2, 5.5), SEED_HELP, advanced=True)
    places = [(0, 3.4), (2, 3.4), (4, 3.4)]
    for (key, words), column, place in zip(order, (0, 2, 4), places):
        plan.step(
            f"surface_{key.lower()}", "steadfield:adaptivedensity", f"{words} surface",
            (column, 2.2),
            {
                "RECORDS": given(f"LAYER_{key}"),
                "BOUNDARY": given("BOUNDARY"),
                "BANDWIDTH": given("BANDWIDTH"),
            },
            [("DENSITY", f"Density, {words.lower()} layer", place, "Records per km².")],
        )  # fmt: skip
    names = worked_out(_names_of([f"LAYER_{key}" for key, _ in order]))
    surfaces = [result(f"surface_{key.lower()}", "DENSITY") for key, _ in order]
    plan.step(
        "blend", "steadfield:inkblend", "Blend into one picture", (1, 4.8),
        {"LAYERS": surfaces, "NAMES": names},
        [
            ("PICTURE", "Picture", (0, 6), "One ink for each layer; where they meet, it darkens."),
            ("LEGEND", "Legend", (1, 6), "A drawing (SVG, with a PNG beside it) for a layout."),
            ("REPORT", "Report on the picture", (0, 6.8), "Whether the inks can be told apart."),
        ],
        note="Surfaces with grids of their own are put on that of the first.",
        note_place=(0, 4.8),
    )  # fmt: skip
    plan.step(
        "zones", "steadfield:agreement", "Zones where layers agree", (3, 4.8),
        {
            "LAYERS": surfaces,
            "NAMES": names,
            "SHARE": given("SHARE"),
            "LEAST_LAYERS": given("LEAST_LAYERS"),
            "SEED": given("SEED"),
        },
        [
            ("ZONES", "Zones of agreement", (3, 6), "Each zone with its layers, area and rank."),
            ("AGREEMENT", "Agreement", (4, 6), "How many cores meet in each pixel."),
            ("REPORT", "Report on the zones", (4, 6.8), "Which zones, how sure, and by chance?"),
        ],
        note="Zones hold when they outlast other weights of the layers.",
    )  # fmt: skip
    return plan.finished()


def _names_of(layers):
    """Expression: the names given, or those of the layers, their tables or their files."""
    own = " || '; ' || ".join(
        f"replace(coalesce(layer_property(@{layer}, 'name'), "
        f"nullif(regexp_substr(to_string(@{layer}), 'layername=([^|]+)'), ''), "
        f"nullif(base_file_name(to_string(@{layer})), ''), '{layer[-1]}'), ';', ',')"
        for layer in layers
    )
    return f"if(length(coalesce(@NAMES, '')) > 0, @NAMES, {own})"


UNCLEAN = (
    "Nothing was released: the audit of the hexagons against the official zones is not clean. See "
    "the risks and the report; choose larger hexagons, a higher least count or fewer published "
    "zones, and run again. A file of that name is from an earlier run."
)


def clean_release():
    """Records, safe hexagons and surface, audit, release only if clean."""
    plan = Diagram(
        "Release only what the audit passes",
        "Makes disclosure-safe hexagons and a disclosure-safe surface, audits the hexagons against "
        "the counts of the official zones that are published already, and writes the two files "
        "for release only if the audit is clean. Until then both exist for the run alone. The "
        "surface has an attack of its own, and the run fails where that finds an address. "
        "Thresholds are set by the data's owner and by law, not by this model.",
    )
    plan.input(points("RECORDS", "Records"), (0, 0), "One point for each confidential record.")
    plan.input(
        field("CONTRIBUTOR", "Contributor", "RECORDS", True, False),
        (1, 0),
        "Who is protected, such as the household. Empty: each record is one of its own.",
    )
    plan.input(polygons("BOUNDARY", "Boundary", True), (2, 0), "Study area, public.")
    plan.input(
        polygons("OFFICIAL", "Official zones"),
        (0, 4.2),
        "Zones whose counts of the same records are, or will be, public.",
    )
    plan.input(
        field("OFFICIAL_COUNT", "Count of the official zones", "OFFICIAL", False),
        (1, 4.2),
        "Null where the count is withheld.",
    )
    plan.input(
        whole("LEAST_COUNT", "Least count", 10, 2),
        (3, 0),
        "Fewer must not be recognisable. In use: 3, 5, 10 and more.",
    )
    plan.input(
        length("HEXAGON_SIZE", "Hexagon size"),
        (1, 1),
        "Distance between centres. Empty: a round size that holds four times the least count.",
    )
    plan.input(
        length("BANDWIDTH", "Least bandwidth of the surface"),
        (3, 1),
        "Empty: by the normal-scale rule.",
    )
    plan.input(
        QgsProcessingParameterBoolean("STOP", "Stop with an error unless clean", False),
        (3, 4.2),
        "For unattended runs: the model fails where it would otherwise show the risks.",
        advanced=True,
    )
    about = {
        "RECORDS": given("RECORDS"),
        "CONTRIBUTOR": given("CONTRIBUTOR"),
        "BOUNDARY": given("BOUNDARY"),
        "LEAST_COUNT": given("LEAST_COUNT"),
    }
    plan.step(
        "hexagons", "steadfield:safehexagons", "Disclosure-safe hexagons", (1, 2.2),
        {**about, "HEXAGON_SIZE": given("HEXAGON_SIZE")},
        [("REPORT", "Report on the hexagons", (0, 3.2), CONFIDENTIAL)],
        note="Unsafe hexagons are withheld. The layer is not written out yet.",
        note_place=(0, 2.2),
    )  # fmt: skip
    plan.step(
        "surface", "steadfield:safesurface", "Disclosure-safe density surface", (3, 2.2),
        {**about, "BANDWIDTH": given("BANDWIDTH")},
        [("REPORT", "Report on the surface", (4, 3.2), CONFIDENTIAL)],
        note="Fails where its own attack finds an address.",
    )  # fmt: skip
    plan.step(
        "audit", "steadfield:releaseaudit", "Release audit", (2, 4.2),
        {
            "RELEASES": [result("hexagons", "RELEASE"), given("OFFICIAL")],
            "NAMES": "hexagons; official zones",
            "COUNT_FIELDS": worked_out("'count; ' || @OFFICIAL_COUNT"),
            "RECORDS": given("RECORDS"),
            "LEAST_COUNT": given("LEAST_COUNT"),
            "STOP": given("STOP"),
        },
        [
            ("RISKS", "Risks (confidential)", (0, 5.2), CONFIDENTIAL),
            ("REPORT", "Report on the audit", (1, 5.2), CONFIDENTIAL),
        ],
        note="Subtracts zones from hexagons and hexagons from zones, as an outsider would.",
        note_place=(3, 5.2),
    )  # fmt: skip
    plan.step(
        "gate", "native:condition", "Clean?", (2, 6.4), {}, after=[("audit", ""), ("surface", "")],
        branches=[
            ("clean", "coalesce(@Release_audit_CLEAN, 0) = 1"),
            ("not clean", "coalesce(@Release_audit_CLEAN, 0) <> 1"),
        ],
        note="What is not known to be clean is not clean.",
    )  # fmt: skip
    passed = [("gate", "clean")]
    plan.step(
        "release_hexagons", "native:extractbyexpression", "Write the hexagons", (1, 7.6),
        {"INPUT": result("hexagons", "RELEASE"), "EXPRESSION": "true"},
        [("OUTPUT", "Released hexagons", (1, 8.6), "Only there if the audit is clean.")],
        after=passed,
    )  # fmt: skip
    plan.step(
        "release_surface", "gdal:translate", "Write the surface", (3, 7.6),
        {"INPUT": result("surface", "DENSITY")},
        [("OUTPUT", "Released surface", (3, 8.6), "Only there if the audit is clean.")],
        after=passed,
    )  # fmt: skip
    plan.step(
        "refuse", "native:raisewarning", "Say that nothing is released", (4, 7.6),
        {"MESSAGE": UNCLEAN}, after=[("gate", "not clean")],
    )  # fmt: skip
    return plan.finished()


PLANS = {
    "advisedsurface": advised_surface,
    "placesthathold": places_that_hold,
    "placesthatholdtwice": places_that_hold_twice,
    "threelayerstogether": three_layers_together,
    "cleanrelease": clean_release,
}
