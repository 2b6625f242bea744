"""The input layers of every sort and kind for the table of bad input, made once and kept."""

import bad_input_layers as data
import numpy as np
import shapely

CRS = {"deg": data.DEGREES, "nocrs": None, "feet": data.FEET, "far": data.FAR}


# base units along a side that keep a run busy for seconds
LONGER_UNITS = 45


class Feeds:
    """Makes the input layers of every sort and kind once and keeps them."""

    def __init__(self, folder):
        self.folder = folder
        self.strange = folder / "Eingänge 数 a b"
        self.strange.mkdir()
        self.made = {}

    def __call__(self, sort, kind):
        if (sort, kind) not in self.made:
            self.made[sort, kind] = self._make(sort, kind)
        return self.made[sort, kind]

    def files(self):
        """What stands beside the layers, but for what the host puts there when it opens them."""
        hosts_own = ("-wal", "-shm", "-journal", ".aux.xml")
        names = {path.name for path in self.folder.rglob("*")}
        return {name for name in names if not name.endswith(hosts_own)}

    def _make(self, sort, kind):
        if sort == "background":
            return self._vector(data.points(600, seed=21), "Point", "good", "background")
        if sort == "features":
            return [self("points", kind), self("units", "good")]
        if sort == "releases":
            longer = kind == "longer"
            return [self("units", kind), self("zones", "longer" if longer else "good")]
        if sort == "raster":
            return None if kind == "none" else self._raster(kind)
        if sort == "rasters":
            if kind == "none":
                return []
            others = [self._raster("good", 1), self._raster("good", 2)]
            if kind == "mixed":
                others[0] = self._raster("mixed", 1)
            if kind in ("feet", "far"):
                return [self._raster(kind, number) for number in range(3)]
            return [self._raster("good" if kind == "huge" else kind), *others]
        longer = kind == "longer"
        if kind == "wrong":
            return self("units" if sort == "points" else "points", "good")
        if sort == "points":
            count = 20_000 if longer else data.RECORDS
            return self._vector(data.points(count), "Point", kind, sort)
        fine = data.units(LONGER_UNITS if longer else 8)
        if sort == "zones":
            return self._vector(data.zones(fine), "Polygon", kind, sort)
        return self._vector(fine, "Polygon", kind, sort)

    def _vector(self, table, shape, kind, sort):
        folder, name = self.folder, f"{sort}-{kind}"
        table = worsened(table, kind, "weight" if shape == "Point" else "cases")
        if kind == "names":
            folder, name = self.strange, f"{data.STRANGE_NAME} {sort}"
        layer_shape = f"Multi{shape}" if kind == "mixed" else shape
        crs = CRS.get(kind, data.PLANE)
        layer = data.layer_of(table, layer_shape, crs, kind in ("z", "zm"), name)
        # half of the kinds are read from files, half feature by feature
        in_memory = kind in ("mixed", "nan", "inf", "zm", "nocrs", "w-nul")
        return layer if in_memory else data.saved(layer, folder, name)

    def _raster(self, kind, number=0):
        folder, name = self.folder, f"surface-{kind}-{number}"
        if kind == "names":
            folder, name = self.strange, data.STRANGE_NAME
        path = folder / f"{name}.tif"
        if path.exists():
            return str(path)
        values, cell, no_data = data.surfaces(1600 if kind == "longer" else 40)[number], 150.0, None
        if kind == "longer":
            cell = 3.75
        if kind == "mixed":
            values, cell = data.surfaces(25)[number], 240.0
        if kind == "huge":
            return data.empty_raster(path, 100_000, 100_000, 1.0)
        bad = {"nan": np.nan, "inf": np.inf, "some": -9999.0, "w-neg": -5.0, "w-0": 0.0}
        if kind in bad:
            values[3:5, 10:15] = bad[kind]
        if kind in ("null", "some"):
            no_data = -9999.0
        whole = {"null": -9999.0, "same": 7.0, "w-all0": 0.0}
        if kind in whole:
            values = np.full_like(values, whole[kind])
        if kind == "one":
            values = values[20:21, 20:21]
        return data.raster(path, values, CRS.get(kind, data.PLANE), cell, no_data)


def worsened(table, kind, weight):
    """A table of good features in a bad state."""
    count = len(table.geometry)
    bad = np.linspace(count // 4, count - 1, data.BAD_WEIGHTS).astype(int).tolist()
    left_out = [None] * data.LEFT_OUT
    values = table.columns.get(weight, [1] * count)
    changed = {"w-nul": None, "w-neg": -2, "w-0": 0}
    if kind == "none":
        return table.rows([])
    if kind == "null":
        return table.with_geometry([None] * count)
    if kind == "some":
        return table.with_extra(left_out)
    if kind in ("nan", "inf"):
        return table.with_extra([displaced(table.geometry[0], float(kind))] * data.LEFT_OUT)
    if kind == "mixed":
        return several_parts(table)
    if kind in CRS and kind != "nocrs":
        return data.moved(table, CRS[kind])
    if kind == "huge":
        return table.with_geometry(shapely.transform(table.geometry, lambda at: at * 100))
    if kind == "same":
        return table.with_geometry([table.geometry[0]] * count)
    if kind == "one":
        return table.rows([0])
    if kind == "without":
        return table.rows([row for row in range(count) if row not in bad])
    if kind in changed:
        worse = [changed[kind] if row in bad else value for row, value in enumerate(values)]
        return table.with_column(weight, worse)
    if kind == "w-all0":
        return table.with_column(weight, [0] * count)
    if kind == "names":
        columns = {data.STRANGE_FIELD: values}
        columns.update({name: one for name, one in table.columns.items() if name != weight})
        return data.Table(table.geometry, columns)
    return table


def displaced(shape, where):
    """A geometry with a vertex nowhere."""
    coordinates = shapely.get_coordinates(shape)
    coordinates[len(coordinates) // 2] = where
    return shapely.set_coordinates(shapely.from_wkb(shapely.to_wkb(shape)), coordinates)


def several_parts(table):
    """Ten pairs of equal points become one feature each; every other polygon becomes multiple."""
    if table.geometry[0].geom_type != "Point":
        odd = [
            shapely.multipolygons([one]) if row % 2 else one
            for row, one in enumerate(table.geometry)
        ]
        return table.with_geometry(odd)
    rows = [*range(0, 20, 2), *range(20, len(table.geometry))]
    merged = table.rows(rows)
    for place in range(10):
        merged.geometry[place] = shapely.multipoints(table.geometry[2 * place : 2 * place + 2])
    return merged
