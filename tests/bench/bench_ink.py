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
from functools import partial
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


def seconds(work):
    """Seconds by the clock, and those that all cores spent, which other programs hardly disturb."""
    clock, cores = time.perf_counter(), time.process_time()
    work()
    return np.array([time.perf_counter() - clock, time.process_time() - cores])


def copy_layers(paths, folder, options):
    """Read the layers and write them again with the raster library."""
    for position, path in enumerate(paths):
        gdal.Translate(str(folder / f"copy{position}.tif"), path, creationOptions=options)


def blend(paths, folder):
    import processing

    processing.run(
        "steadfield:inkblend",
        {
            "LAYERS": paths,
            "PICTURE": str(folder / "picture.tif"),
            "LEGEND": str(folder / "legend.svg"),
        },
        feedback=QgsProcessingFeedback(False),
    )


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
            copying = seconds(partial(copy_layers, paths, folder, options))
            blending = seconds(partial(blend, paths, folder))
            ratios = blending / copying
            print(
                f"six layers of {side} x {side}, {name}: blend {blending[0]:.1f} s, "
                f"copy {copying[0]:.1f} s, ratio {ratios[0]:.2f} by the clock and "
                f"{ratios[1]:.2f} by processor time; peak memory {peak_memory():.0f} MB",
                flush=True,
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
                "mosaic of 20,000 x 20,000 and a second grid: "
                f"{seconds(partial(blend, paths, folder))[0]:.0f} s, "
                f"peak memory {peak_memory():.0f} MB"
            )
    return kept


if __name__ == "__main__":
    main()
