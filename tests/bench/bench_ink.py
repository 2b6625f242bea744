"""Time and memory of blending six layers, against reading and writing them once.

    python tests/bench/bench_ink.py [side] [mosaic]

Prints, for uncompressed and for compressed rasters of side x side pixels (4096 by default), the
time of the blend over the time the raster library takes to copy the same layers, and the peak
memory. With ``mosaic`` two layers of 20,000 x 20,000 pixels are blended on another grid as well.
"""

import os
import resource
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
sys.path.insert(0, str(ROOT))
sys.path.append("/usr/share/qgis/python/plugins")

import conftest  # noqa: E402, F401
import numpy as np  # noqa: E402
from osgeo import gdal, osr  # noqa: E402
from qgis.core import QgsApplication, QgsProcessingFeedback  # noqa: E402

FORMATS = {
    "uncompressed": ["TILED=YES"],
    "compressed": ["TILED=YES", "COMPRESS=DEFLATE", "PREDICTOR=3", "NUM_THREADS=2"],
}


# The layers' own making must not show in the peak memory.
gdal.SetCacheMax(128 * 2**20)


def make_layer(path, side, cell, shift, options):
    """A smooth density with some noise, written by strips."""
    dataset = gdal.GetDriverByName("GTiff").Create(
        str(path), side, side, 1, gdal.GDT_Float32, options=[*options, "BIGTIFF=IF_SAFER"]
    )
    dataset.SetGeoTransform((4e6, cell, 0, 3e6, 0, -cell))
    reference = osr.SpatialReference()
    reference.ImportFromEPSG(3035)
    dataset.SetProjection(reference.ExportToWkt())
    generator = np.random.default_rng(int(shift) + 1)
    x = np.linspace(0, 12, side, dtype=np.float32) + shift / 500
    for top in range(0, side, 512):
        rows = min(512, side - top)
        y = np.linspace(0, 12, side, dtype=np.float32)[top : top + rows, None]
        values = np.exp(2 * np.sin(x) * np.cos(y + shift / 300))
        values += generator.random((rows, side), dtype=np.float32) * 0.01
        dataset.GetRasterBand(1).WriteArray(values, 0, top)
    return str(path)


def copy_time(paths, folder, options):
    """Seconds in which the raster library reads the layers and writes them again."""
    start = time.perf_counter()
    for position, path in enumerate(paths):
        gdal.Translate(str(folder / f"copy{position}.tif"), path, creationOptions=options)
    return time.perf_counter() - start


def blend_time(paths, folder):
    import processing

    start = time.perf_counter()
    processing.run(
        "steadfield:inkblend",
        {
            "LAYERS": paths,
            "PICTURE": str(folder / "picture.tif"),
            "LEGEND": str(folder / "legend.svg"),
        },
        feedback=QgsProcessingFeedback(False),
    )
    return time.perf_counter() - start


def peak_memory():
    """Megabytes of this process at its largest."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def start_host():
    host = QgsApplication([], True)
    host.initQgis()
    from processing.core.Processing import Processing
    from steadfield.plugin.provider import Provider

    Processing.initialize()
    provider = Provider()
    QgsApplication.processingRegistry().addProvider(provider)
    return host, provider


def main():
    side = next((int(word) for word in sys.argv[1:] if word.isdigit()), 4096)
    kept = start_host()
    print(f"memory before: {peak_memory():.0f} MB")
    for name, options in FORMATS.items():
        with tempfile.TemporaryDirectory() as folder:
            folder = Path(folder)
            paths = [
                make_layer(folder / f"layer{i}.tif", side, 25, 40 * i, options) for i in range(6)
            ]
            copying = copy_time(paths, folder, options)
            blending = blend_time(paths, folder)
            print(
                f"six layers of {side} x {side}, {name}: blend {blending:.1f} s, "
                f"copy {copying:.1f} s, ratio {blending / copying:.2f}; "
                f"peak memory {peak_memory():.0f} MB"
            )
    if "mosaic" in sys.argv:
        with tempfile.TemporaryDirectory() as folder:
            folder = Path(folder)
            options = FORMATS["compressed"]
            paths = [
                make_layer(folder / "a.tif", 20_000, 25, 0, options),
                make_layer(folder / "b.tif", 16_000, 31, 400, options),
            ]
            print(
                f"mosaic of 20,000 x 20,000 and a second grid: {blend_time(paths, folder):.0f} s, "
                f"peak memory {peak_memory():.0f} MB"
            )
    return kept


if __name__ == "__main__":
    main()
