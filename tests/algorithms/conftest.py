"""A running host with the provider, and small layers to feed it."""

import sys
import textwrap
from pathlib import Path

import pytest
from qgis.core import (
    QgsApplication,
    QgsCoordinateReferenceSystem,
    QgsFeature,
    QgsField,
    QgsGeometry,
    QgsProcessingContext,
    QgsProcessingFeedback,
    QgsProject,
    QgsVectorFileWriter,
    QgsVectorLayer,
)

HOST_PLUGINS = [
    str(Path(QgsApplication.pkgDataPath()) / "python" / "plugins"),
    "/usr/share/qgis/python/plugins",
]


class Watcher(QgsProcessingFeedback):
    """Feedback that keeps what it is told and can cancel at a share of the work."""

    def __init__(self, cancel_at=None):
        super().__init__(False)
        self.cancel_at = cancel_at
        self.warnings = []
        self.informed = []
        self.errors = []
        self.shares = []
        self.progressChanged.connect(self._progressed)

    def _progressed(self, percent):
        self.shares.append(percent)
        if self.cancel_at is not None and percent >= 100 * self.cancel_at:
            self.cancel()

    def pushWarning(self, words):
        self.warnings.append(words)

    def pushInfo(self, words):
        self.informed.append(words)

    def reportError(self, words, fatalError=False):
        self.errors.append(words)


@pytest.fixture(scope="session")
def provider(qgis_app, qgis_processing):
    """The provider, registered once."""
    from steadfield.plugin.provider import Provider

    registry = QgsApplication.processingRegistry()
    if registry.providerById("steadfield") is None:
        registry.addProvider(Provider())
    return registry.providerById("steadfield")


@pytest.fixture
def watch():
    """Make a feedback that keeps what it is told; see `Watcher`."""
    return Watcher


@pytest.fixture
def open_output():
    """Open a vector output by its path or hand on a memory layer."""

    def open_layer(results, name):
        value = results[name]
        return QgsVectorLayer(value, name, "ogr") if isinstance(value, str) else value

    return open_layer


@pytest.fixture
def run(provider):
    """Run an algorithm by its id; returns the results and the feedback."""
    import processing

    def runner(algorithm, parameters, cancel_at=None):
        watcher = Watcher(cancel_at)
        context = QgsProcessingContext()
        context.setProject(QgsProject.instance())
        if cancel_at == 0:
            watcher.cancel()
        results = processing.run(
            f"steadfield:{algorithm}", parameters, feedback=watcher, context=context
        )
        return results, watcher

    return runner


@pytest.fixture
def point_layer():
    """Make a memory layer of points from coordinates and columns of values."""

    def make(x, y, crs="EPSG:3035", **columns):
        return _layer("Point", [f"POINT ({a} {b})" for a, b in zip(x, y)], crs, columns)

    return make


@pytest.fixture
def polygon_layer():
    """Make a memory layer of polygons from shapely geometries and columns of values."""

    def make(polygons, crs="EPSG:3035", **columns):
        return _layer("MultiPolygon", [polygon.wkt for polygon in polygons], crs, columns)

    return make


def _layer(kind, shapes, crs, columns):
    layer = QgsVectorLayer(kind, "made for a test", "memory")
    layer.setCrs(QgsCoordinateReferenceSystem(crs))
    from steadfield.plugin.outputs import FIELD_TYPES

    for name, values in columns.items():
        known = [value for value in values if value is not None]
        if any(isinstance(value, str) for value in known):
            sort = "text"
        else:
            sort = "int" if all(float(value).is_integer() for value in known) else "float"
        layer.dataProvider().addAttributes([QgsField(name, FIELD_TYPES[sort])])
    layer.updateFields()
    features = []
    for row, shape in enumerate(shapes):
        feature = QgsFeature(layer.fields())
        if shape is not None:
            geometry = QgsGeometry.fromWkt(shape)
            geometry.convertToMultiType() if kind.startswith("Multi") else None
            feature.setGeometry(geometry)
        for name, values in columns.items():
            value = values[row]
            feature[name] = value.item() if hasattr(value, "item") else value
        features.append(feature)
    layer.dataProvider().addFeatures(features)
    layer.updateExtents()
    return layer


@pytest.fixture
def save_layer(tmp_path):
    """Write a layer to a GeoPackage and open it from there."""

    def save(layer, name="saved"):
        path = str(tmp_path / f"{name}.gpkg")
        options = QgsVectorFileWriter.SaveVectorOptions()
        options.driverName = "GPKG"
        options.layerName = name
        context = QgsProject.instance().transformContext()
        QgsVectorFileWriter.writeAsVectorFormatV3(layer, path, context, options)
        opened = QgsVectorLayer(f"{path}|layername={name}", name, "ogr")
        assert opened.isValid()
        return opened

    return save


sys.path.extend(path for path in HOST_PLUGINS if Path(path).is_dir() and path not in sys.path)


def pytest_terminal_summary(terminalreporter):
    """Print the table of bad input: what became of each algorithm with each kind of it."""
    cells = {}
    for outcome in ("passed", "failed", "skipped"):
        for report in terminalreporter.getreports(outcome):
            for name, words in getattr(report, "user_properties", ()):
                if name == "bad input":
                    algorithm, kind, code = words.split()
                    cells[algorithm, kind] = code if outcome == "passed" else "FAIL"
    if not cells:
        return
    from bad_input import CODES, KINDS

    algorithms = list(dict.fromkeys(algorithm for algorithm, _ in cells))
    widest = max(map(len, algorithms))
    terminalreporter.section("bad input")
    heading = " ".join(f"{kind:>5}" for kind in KINDS)
    terminalreporter.write_line(f"{'':{widest}} {heading}")
    for algorithm in algorithms:
        row = " ".join(f"{cells.get((algorithm, kind), ''):>5}" for kind in KINDS)
        terminalreporter.write_line(f"{algorithm:{widest}} {row}")
    for words in (CODES, KINDS):
        legend = "; ".join(f"{key}: {value}" for key, value in words.items())
        for line in textwrap.wrap(legend, len(heading) + widest):
            terminalreporter.write_line(line)
