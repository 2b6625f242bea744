"""Benchmark: a million records from a GeoPackage through every algorithm that takes records.

Prints for each the seconds spent on reading, computing, drawing the report's plots and writing, and
whether reading, drawing and writing together stay below computing (or computing below a second).
Run by hand from the checkout's root: ``python tests/bench/bench_records.py [ALGORITHM ...]``.
"""

import resource
import sys
import tempfile
import time
from collections import defaultdict
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parent.parent.parent / "tools"))
from headless import Host

COUNT, SIDE = 1_000_000, 60_000.0

# what each run asks for beside its records and its outputs; all else is left at its default
SETTINGS = {
    "recordcheck": {"WEIGHT": "weight", "GROUP": "kind", "KEY": "number", "BOUNDARY": "area"},
    "centrespread": {"WEIGHT": "weight", "GROUP": "kind", "ORDER": "month"},
    "adaptivedensity": {"WEIGHT": "weight", "BOUNDARY": "area"},
    "bandwidthadvice": {"WEIGHT": "weight", "BOUNDARY": "area"},
    "densityratio": {"BACKGROUND": "background", "BOUNDARY": "area"},
    "densityoutlines": {"DENSITY": "density"},
    "rawink": {"LAYERS": ["records", "background"]},
    "gridvariance": {"BACKGROUND": "background", "BOUNDARY": "area"},
    "cellsize": {"WEIGHT": "weight", "BOUNDARY": "area"},
    "safehexagons": {"CONTRIBUTOR": "contributor", "WEIGHT": "weight", "BOUNDARY": "area"},
    "safesurface": {"CONTRIBUTOR": "contributor", "BOUNDARY": "area"},
}
ENDINGS = {"rasterDestination": ".tif", "sink": ".gpkg", "fileDestination": ".html"}


class Clock:
    """Seconds by activity; what runs inside an activity is not counted twice."""

    def __init__(self):
        self.spent = defaultdict(float)
        self._running = []

    def watch(self, owner, name, activity):
        """Count the calls of a method as an activity."""
        method = getattr(owner, name)

        def watched(*arguments, **named):
            begun = time.perf_counter()
            self._running.append(0.0)
            try:
                return method(*arguments, **named)
            finally:
                whole = time.perf_counter() - begun
                self.spent[activity] += whole - self._running.pop()
                if self._running:
                    self._running[-1] += whole

        setattr(owner, name, watched)


def make_points(path, rng, hearts, spread):
    """A GeoPackage of a million points with a weight, groups, a contributor and a number."""
    from osgeo import gdal, ogr, osr

    reference = osr.SpatialReference()
    reference.ImportFromEPSG(3035)
    chosen = hearts[rng.integers(0, len(hearts), COUNT)]
    places = np.clip(chosen + rng.normal(0, spread, (COUNT, 2)), 0, SIDE)
    places += np.array([4e6, 3e6])
    columns = {
        "weight": (ogr.OFTReal, rng.integers(1, 4, COUNT).astype(float)),
        "month": (ogr.OFTInteger, rng.integers(1, 13, COUNT)),
        "kind": (ogr.OFTString, np.array(list("abcdefgh"))[rng.integers(0, 8, COUNT)]),
        "contributor": (ogr.OFTInteger64, rng.integers(0, COUNT // 2, COUNT)),
        "number": (ogr.OFTInteger64, np.arange(COUNT)),
    }
    store = gdal.GetDriverByName("GPKG").Create(str(path), 0, 0, 0, gdal.GDT_Unknown)
    layer = store.CreateLayer(path.stem, reference, ogr.wkbPoint)
    for name, (kind, _) in columns.items():
        layer.CreateField(ogr.FieldDefn(name, kind))
    definition = layer.GetLayerDefn()
    layer.StartTransaction()
    rows = zip(*places.T.tolist(), *(values.tolist() for _, values in columns.values()))
    for x, y, *values in rows:
        feature = ogr.Feature(definition)
        point = ogr.Geometry(ogr.wkbPoint)
        point.AddPoint_2D(x, y)
        feature.SetGeometryDirectly(point)
        for index, value in enumerate(values):
            feature.SetField(index, value)
        layer.CreateFeature(feature)
    layer.CommitTransaction()


def make_area(path):
    """A GeoPackage of the study area, a square with a corner cut off."""
    from osgeo import gdal, ogr, osr

    reference = osr.SpatialReference()
    reference.ImportFromEPSG(3035)
    store = gdal.GetDriverByName("GPKG").Create(str(path), 0, 0, 0, gdal.GDT_Unknown)
    layer = store.CreateLayer("area", reference, ogr.wkbPolygon)
    corners = [(0, 0), (SIDE, 0), (SIDE, 0.7 * SIDE), (0.7 * SIDE, SIDE), (0, SIDE), (0, 0)]
    words = ", ".join(f"{x + 4e6} {y + 3e6}" for x, y in corners)
    feature = ogr.Feature(layer.GetLayerDefn())
    feature.SetGeometry(ogr.CreateGeometryFromWkt(f"POLYGON (({words}))"))
    layer.CreateFeature(feature)


def watch_all(clock):
    """Count reading, drawing and writing of every run."""
    from steadfield.algorithms.inputs import Inputs
    from steadfield.algorithms.job import Job
    from steadfield.plugin.report import Report

    for name in ("_read", "table", "rasters", "boundary"):
        clock.watch(Inputs, name, "read")
    for name in ("write_layer", "write_raster", "write_picture", "write_file", "write_drawing"):
        clock.watch(Job, name, "write")
    for name in ("plot", "picture", "html"):
        clock.watch(Report, name, "draw")


def parameters_of(algorithm, folder):
    """Layers and settings of one run, with every output that the dialog offers."""
    files = {name: str(folder / f"{name}.gpkg") for name in ("records", "background", "area")}
    files["density"] = str(folder / "adaptivedensity" / "DENSITY.tif")
    chosen = {"RECORDS": files["records"], **SETTINGS[algorithm.name()]}
    own = folder / algorithm.name()
    own.mkdir(exist_ok=True)
    known = {}
    for key, value in chosen.items():
        if isinstance(value, list):
            known[key] = [files[one] for one in value]
        else:
            known[key] = files.get(value, value)
    for definition in algorithm.destinationParameterDefinitions():
        ending = ENDINGS[definition.type()]
        if definition.name() == "LEGEND":
            ending = ".svg"
        known[definition.name()] = str(own / f"{definition.name()}{ending}")
    names = {definition.name() for definition in algorithm.parameterDefinitions()}
    return {key: value for key, value in known.items() if key in names}


def run(name, folder, clock):
    """One run; prints its line of the table."""
    import processing
    from qgis.core import QgsApplication, QgsProcessingFeedback

    algorithm = QgsApplication.processingRegistry().algorithmById(f"steadfield:{name}")
    parameters = parameters_of(algorithm, folder)
    clock.spent.clear()
    begun, worked = time.perf_counter(), time.process_time()
    processing.run(algorithm, parameters, feedback=QgsProcessingFeedback(False))
    whole, worked = time.perf_counter() - begun, time.process_time() - worked
    spent = clock.spent
    aside = sum(spent.values())
    computing = whole - aside
    fine = aside <= computing or computing < 1
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{name:17s} {spent['read']:6.2f} {computing:8.2f} {spent['draw']:6.2f} "
        f"{spent['write']:6.2f}   {aside / computing:6.2f} {worked / whole:5.2f} {peak:6.2f}  "
        f"{'ok' if fine else 'TOO SLOW ASIDE'}",
        flush=True,
    )


def main():
    host = Host()
    clock = Clock()
    watch_all(clock)
    rng = np.random.default_rng(1)
    hearts = rng.uniform(0, SIDE, (300, 2))
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        make_points(folder / "records.gpkg", rng, hearts, 1500.0)
        make_points(folder / "background.gpkg", rng, hearts, 2500.0)
        make_area(folder / "area.gpkg")
        print(f"{COUNT:,} records; seconds        aside/computing, processor/clock, peak GB so far")
        print(f"{'':17s} {'read':>6s} {'compute':>8s} {'draw':>6s} {'write':>6s}")
        for algorithm in sys.argv[1:] or SETTINGS:
            run(algorithm, folder, clock)
    host.leave()


if __name__ == "__main__":
    main()
