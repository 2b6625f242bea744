"""The whole job on the practice district: see tools/demo.sh."""

import sys
from pathlib import Path

from headless import Host

SEED = 1
SAFE_SIZE, SECOND_SIZE = 800.0, 700.0
LEAST_COUNT = 10
RELABELLINGS = 199
BUDGET = 0.1


def analyse(host, folder):
    """Make the district and run every step of the job; returns the results by step."""
    district = host.run("practicedistrict", SEED=SEED, SIZE=0, FOLDER=str(folder))
    table = f"{district['PACKAGE']}|layername="
    falls, residents = table + "falls", table + "residents"
    boundary = table + "district"

    def out(name):
        return str(folder / name)

    done = {
        "table": table, "least count": LEAST_COUNT, "budget": BUDGET,
        "ratio relabellings": RELABELLINGS,
    }  # fmt: skip
    done["check"] = host.run(
        "recordcheck", RECORDS=falls, BOUNDARY=boundary, FLAGGED=out("flagged_records.gpkg"),
        REPORT=out("report_records.html"),
    )  # fmt: skip
    done["advice"] = host.run(
        "bandwidthadvice", RECORDS=falls, BOUNDARY=boundary, REPORT=out("report_bandwidth.html")
    )
    done["density"] = host.run(
        "adaptivedensity", RECORDS=falls, BOUNDARY=boundary, DENSITY=out("density_falls.tif"),
        ERROR=out("density_falls_error.tif"), SUPPORT=out("density_falls_support.tif"),
        REPORT=out("report_density.html"),
    )  # fmt: skip
    done["ratio"] = host.run(
        "densityratio", RECORDS=falls, BACKGROUND=residents, BOUNDARY=boundary, SEED=SEED,
        RELABELLINGS=RELABELLINGS, RATIO=out("ratio.tif"), P_VALUE=out("ratio_p_value.tif"),
        OUTLINES=out("ratio_outlines.gpkg"), REPORT=out("report_ratio.html"),
    )  # fmt: skip
    done["grid"] = host.run(
        "gridvariance", RECORDS=falls, BACKGROUND=residents, BOUNDARY=boundary, SEED=SEED,
        VARIANCE=out("zoning_variance.tif"), TABLE=out("zoning_variance_table.csv"),
        REPORT=out("report_zoning_variance.html"),
    )  # fmt: skip
    done["units"] = host.run(
        "unitvariance", UNITS=table + "base_units", COUNT="falls", TOTAL="residents",
        OFFICIAL="ward", LABEL="unit", BUDGET=BUDGET, SEED=SEED,
        UNITS_OUT=out("units_variance.gpkg"), TABLE=out("units_variance_table.csv"),
        EXTREMES=out("units_extremes.gpkg"),
        REPORT=out("report_units.html"),
    )  # fmt: skip
    together = [done["density"]["DENSITY"]]
    for name in ("unlit_paths", "icy_paths"):
        target = out(f"density_{name}.tif")
        host.run("adaptivedensity", RECORDS=table + name, BOUNDARY=boundary, DENSITY=target)
        together.append(target)
    names = "falls; unlit paths; icy paths"
    done["blend"] = host.run(
        "inkblend", LAYERS=together, NAMES=names, PICTURE=out("blend.tif"),
        LEGEND=out("blend_legend.svg"), REPORT=out("report_blend.html"),
    )  # fmt: skip
    done["agreement"] = host.run(
        "agreement", LAYERS=together, NAMES=names, SEED=SEED, AGREEMENT=out("agreement.tif"),
        ZONES=out("agreement_zones.gpkg"), REPORT=out("report_agreement.html"),
    )  # fmt: skip
    done["safe"] = host.run(
        "safehexagons", RECORDS=falls, CONTRIBUTOR="household", BOUNDARY=boundary,
        HEXAGON_SIZE=SAFE_SIZE, LEAST_COUNT=LEAST_COUNT, SEED=SEED,
        RELEASE=out("release_hexagons.gpkg"), REPORT=out("report_release.html"),
    )  # fmt: skip
    done["safe surface"] = host.run(
        "safesurface", RECORDS=falls, CONTRIBUTOR="household", BOUNDARY=boundary,
        LEAST_COUNT=LEAST_COUNT, DENSITY=out("release_surface.tif"),
        REPORT=out("report_release_surface.html"),
    )  # fmt: skip
    done["audit"] = host.run(
        "releaseaudit", RELEASES=[done["safe"]["RELEASE"], table + "care_wards"],
        COUNT_FIELDS="count; falls", RECORDS=falls, LEAST_COUNT=LEAST_COUNT,
        RISKS=out("audit_risks.gpkg"), REPORT=out("report_audit.html"),
    )  # fmt: skip
    # what a second release of the same records would give away
    done["second safe"] = host.run(
        "safehexagons", RECORDS=falls, CONTRIBUTOR="household", BOUNDARY=boundary,
        HEXAGON_SIZE=SECOND_SIZE, LEAST_COUNT=LEAST_COUNT, SEED=SEED,
        RELEASE=out("second_release.gpkg"),
    )  # fmt: skip
    done["second audit"] = host.run(
        "releaseaudit", RELEASES=[done["safe"]["RELEASE"], done["second safe"]["RELEASE"]],
        NAMES="hexagons; smaller hexagons", RECORDS=falls, LEAST_COUNT=LEAST_COUNT,
        RISKS=out("second_audit_risks.gpkg"), REPORT=out("report_second_audit.html"),
    )  # fmt: skip
    return done


def main(folder):
    folder = Path(folder).resolve()
    folder.mkdir(parents=True, exist_ok=True)
    host = Host()
    done = analyse(host, folder)
    import demo_pages
    import worked_case

    demo_pages.write(folder, done)
    worked_case.write_figures(folder, done)
    print(
        f"\nOpen {folder.name}/index.html; every layer stands styled in {folder.name}/ostermoor.qgz"
    )
    host.leave()


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else "demo-output")
