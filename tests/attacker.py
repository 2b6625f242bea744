"""An outsider who wants to know what a release withholds. Shares no code with the project.

He has the published figures and knows the rules: nothing is negative, a withheld cell that holds
records is not empty. He solves linear programmes over what is published, on small cases he tries
every table, and from files he takes every number that any table, field or note carries.
"""

import sqlite3

import numpy as np
from osgeo import gdal, ogr
from scipy import sparse
from scipy.optimize import linprog

ogr.UseExceptions()


class Case:
    """Unknown pieces of cells and what is known of their sums.

    Parameters
    ----------
    lower, upper : (n,) arrays
        Bounds of each piece.
    sums : list of (pieces, low, high)
        Bounds of sums of pieces; an exact sum has low equal to high.
    """

    def __init__(self, lower, upper, sums):
        self.lower = np.asarray(lower, float)
        self.upper = np.asarray(upper, float)
        self.sums = [(np.asarray(p, int), float(a), float(b)) for p, a, b in sums if len(p)]


def intervals(cases, aims):
    """Smallest and largest value of one sum of pieces in each case.

    The cases share nothing, so one programme over all of them finds every optimum at once.

    Parameters
    ----------
    cases : list of Case
    aims : list of sequences of int
        Pieces that the attacker adds up, one sequence a case.

    Returns
    -------
    (cases, 2) array
    """
    start = np.cumsum([0] + [len(case.lower) for case in cases])
    rows, columns, low, high = [], [], [], []
    for case, first in zip(cases, start):
        for pieces, a, b in case.sums:
            rows += [len(low)] * len(pieces)
            columns += (first + pieces).tolist()
            low.append(a)
            high.append(b)
    matrix = sparse.csr_matrix((np.ones(len(rows)), (rows, columns)), (len(low), start[-1]))
    low, high = np.array(low), np.array(high)
    exact = low == high
    aim = np.zeros(start[-1])
    for first, pieces in zip(start, aims):
        aim[first + np.asarray(pieces, int)] = 1.0
    bounds = np.column_stack(
        [np.concatenate([c.lower for c in cases]), np.concatenate([c.upper for c in cases])]
    )
    loose = matrix[~exact]
    found = []
    for sign in (1.0, -1.0):
        solution = linprog(
            sign * aim,
            A_eq=matrix[exact] if exact.any() else None,
            b_eq=low[exact] if exact.any() else None,
            A_ub=sparse.vstack([loose, -loose]) if (~exact).any() else None,
            b_ub=np.concatenate([high[~exact], -low[~exact]]) if (~exact).any() else None,
            bounds=bounds,
            method="highs",
        )
        assert solution.status == 0, solution.message
        found.append(
            [
                solution.x[first + np.asarray(pieces, int)].sum()
                for first, pieces in zip(start, aims)
            ]
        )
    return np.array(found).T


def every_table(case, most):
    """Every whole-number table that agrees with what is known, as rows of an array.

    Parameters
    ----------
    case : Case
    most : int
        Largest value tried for a piece.
    """
    tables = np.zeros((1, 0), int)
    for piece in range(len(case.lower)):
        top = int(min(case.upper[piece], most))
        values = np.arange(int(case.lower[piece]), top + 1)
        tables = np.column_stack(
            [np.repeat(tables, len(values), axis=0), np.tile(values, len(tables))]
        )
        for pieces, low, high in case.sums:
            known = tables[:, pieces[pieces <= piece]].sum(1)
            open_ones = pieces[pieces > piece]
            least = case.lower[open_ones].sum()
            most_left = np.minimum(case.upper[open_ones], most).sum()
            tables = tables[(known + least <= high) & (known + most_left >= low)]
    return tables


def numbers_of_file(path):
    """Every value of every table of a GeoPackage, hidden ones too, by table and column."""
    found = {}
    with sqlite3.connect(f"file:{path}?mode=ro", uri=True) as base:
        names = [
            row[0] for row in base.execute("select name from sqlite_master where type='table'")
        ]
        for name in names:
            try:
                cursor = base.execute(f'select * from "{name}"')
            except sqlite3.DatabaseError:
                continue
            columns = [one[0] for one in cursor.description]
            for column, values in zip(columns, zip(*cursor.fetchall())):
                found[(name, column)] = list(values)
    return found


def features_of_file(path):
    """Features in file order through the vector library: (fid, fields, well-known binary)."""
    source = gdal.OpenEx(str(path), gdal.OF_VECTOR)
    rows = []
    for layer in (source.GetLayer(i) for i in range(source.GetLayerCount())):
        for feature in layer:
            shape = feature.GetGeometryRef()
            rows.append(
                (feature.GetFID(), feature.items(), bytes(shape.ExportToWkb()) if shape else None)
            )
    return rows


def notes_of_file(path):
    """What a file says about itself: metadata of file and layers, fields and domains."""
    source = gdal.OpenEx(str(path), gdal.OF_VECTOR)
    notes = [
        str(source.GetMetadata_Dict(domain)) for domain in source.GetMetadataDomainList() or [""]
    ]
    for layer in (source.GetLayer(i) for i in range(source.GetLayerCount())):
        notes += [str(layer.GetMetadata_Dict(d)) for d in layer.GetMetadataDomainList() or [""]]
        definition = layer.GetLayerDefn()
        for index in range(definition.GetFieldCount()):
            one = definition.GetFieldDefn(index)
            notes.append(f"{one.GetName()} {one.GetDefault()} {one.GetDomainName()}")
            notes.append(getattr(one, "GetAlternativeName", lambda: "")() or "")
    return "\n".join(notes)
