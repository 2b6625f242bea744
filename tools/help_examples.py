"""Run the examples of the help pages and keep what their outputs hold: ``tools/help_examples.py``.

The bands and fields that the pages name are those of layers that the tools have written, here on
the practice district at a tenth of its size.
"""

import json
import os
import shlex
import tempfile
from pathlib import Path

from help_parts import TEXTS, sections

# the order in which the examples run, because some take what others made
FIRST = ("practicedistrict", "adaptivedensity", "safehexagons")
ENDINGS = {"rasterDestination": ".tif", "sink": ".gpkg", "fileDestination": ".html"}


def example(name):
    """The algorithm and the parameters of the example of a page.

    Returns
    -------
    str, dict
        A key that is named twice has a list.
    """
    words = shlex.split(sections(name)["example"].replace("\\\n", " "))
    if words[:2] != ["qgis_process", "run"]:
        raise ValueError(f"{name}: an example starts with qgis_process run; found {words[:2]}")
    parameters = {}
    for word in words[3:]:
        key, _, given = word[2:].partition("=")
        if key in parameters:
            before = parameters[key]
            parameters[key] = [*(before if isinstance(before, list) else [before]), given]
        else:
            parameters[key] = given
    return words[2], parameters


def run_all(algorithms):
    """Run every example in the current folder; returns what the outputs hold, by algorithm.

    Parameters
    ----------
    algorithms : dict of str to SteadfieldAlgorithm
    """
    import processing

    made = {}
    for name in [*FIRST, *(one for one in algorithms if one not in FIRST)]:
        identifier, parameters = example(name)
        for definition in algorithms[name].destinationParameterDefinitions():
            # layers that the example leaves out are asked for too, for their fields
            if definition.name() not in parameters and definition.type() in ENDINGS:
                ending = ENDINGS[definition.type()]
                parameters[definition.name()] = f"{name}_{definition.name()}{ending}"
        results = processing.run(identifier, parameters)
        made[name] = contents(algorithms[name], results)
        if name == "practicedistrict":
            made[name] = tables(results["PACKAGE"])
            unlit = {"RECORDS": "ostermoor.gpkg|layername=unlit_paths"}
            processing.run("steadfield:adaptivedensity", {**unlit, "DENSITY": "density_unlit.tif"})
    return made


def contents(algorithm, results):
    """Bands with units, or fields with meanings, of each layer that a run has written."""
    readers = {"outputRaster": bands, "outputVector": fields}
    return {
        output.name(): readers[output.type()](results[output.name()])
        for output in algorithm.outputDefinitions()
        if output.type() in readers and results.get(output.name())
    }


def bands(path):
    """Unit of each band by its name."""
    from osgeo import gdal

    raster = gdal.Open(path)
    found = [raster.GetRasterBand(place + 1) for place in range(raster.RasterCount)]
    return {band.GetDescription(): band.GetUnitType() for band in found}


def fields(path):
    """Alias of each field that the tool has added to those of its input, by its name."""
    from qgis.core import QgsVectorLayer

    layer = QgsVectorLayer(path, "read", "ogr")
    layer.loadNamedStyle(str(Path(path).with_suffix(".qml")))
    return {
        field.name(): field.alias()
        for field in layer.fields()
        if field.alias() and field.alias() != field.name()
    }


def tables(path):
    """Fields with their aliases of each table of the practice district, by its name."""
    from osgeo import ogr
    from qgis.core import QgsVectorLayer

    source = ogr.Open(path)
    names = [source.GetLayer(place).GetName() for place in range(source.GetLayerCount())]
    layers = {name: QgsVectorLayer(f"{path}|layername={name}") for name in names}
    return {
        name: {one.name(): one.alias() for one in layer.fields() if one.name() != "fid"}
        for name, layer in layers.items()
        if name != "layer_styles"
    }


def written(made):
    """The text of the file that is kept, a line for each output."""
    lines = [
        f'"{name}": {{\n'
        + ",\n".join(
            f'  "{output}": {json.dumps(inner, ensure_ascii=False)}'
            for output, inner in made[name].items()
        )
        + "\n}"
        for name in sorted(made)
    ]
    return "{\n" + ",\n".join(lines) + "\n}\n"


def main():
    from headless import Host

    host = Host()
    algorithms = {one.name(): one for one in host.provider.algorithms() if hasattr(one, "QUESTION")}
    with tempfile.TemporaryDirectory() as folder:
        os.chdir(folder)
        made = run_all(algorithms)
    (TEXTS / "outputs.json").write_text(written(made), encoding="utf-8")
    host.leave()


if __name__ == "__main__":
    main()
