"""What differs between versions of the host application, in one place."""

from qgis.core import NULL, Qgis, QgsProcessing, QgsProcessingFeatureSource, QgsUnitTypes
from qgis.PyQt.QtCore import QMetaType, QVariant

if Qgis.QGIS_VERSION_INT >= 33800:
    INTEGER, BIG_INTEGER = QMetaType.Type.Int, QMetaType.Type.LongLong
    REAL, TEXT = QMetaType.Type.Double, QMetaType.Type.QString
else:
    INTEGER, BIG_INTEGER = QVariant.Type.Int, QVariant.Type.LongLong
    REAL, TEXT = QVariant.Type.Double, QVariant.Type.String

if Qgis.QGIS_VERSION_INT >= 33000:
    METRES = Qgis.DistanceUnit.Meters
else:
    METRES = QgsUnitTypes.DistanceUnit.DistanceMeters

if Qgis.QGIS_VERSION_INT >= 33600:
    ANY_VECTOR = Qgis.ProcessingSourceType.VectorAnyGeometry
    TABLE = Qgis.ProcessingSourceType.Vector
    POINTS = Qgis.ProcessingSourceType.VectorPoint
    LINES = Qgis.ProcessingSourceType.VectorLine
    POLYGONS = Qgis.ProcessingSourceType.VectorPolygon
    RASTERS = Qgis.ProcessingSourceType.Raster
    SKIP_VALIDITY_CHECKS = Qgis.ProcessingFeatureSourceFlag.SkipGeometryValidityChecks
else:
    ANY_VECTOR = QgsProcessing.SourceType.TypeVectorAnyGeometry
    TABLE = QgsProcessing.SourceType.TypeVector
    POINTS = QgsProcessing.SourceType.TypeVectorPoint
    LINES = QgsProcessing.SourceType.TypeVectorLine
    POLYGONS = QgsProcessing.SourceType.TypeVectorPolygon
    RASTERS = QgsProcessing.SourceType.TypeRaster
    SKIP_VALIDITY_CHECKS = QgsProcessingFeatureSource.Flag.FlagSkipGeometryValidityChecks


def is_null(value):
    """Whether a field's value is null, in whichever form a version hands it over."""
    return value is None or value == NULL or (isinstance(value, QVariant) and value.isNull())


def field_names(algorithm, parameters, name, context):
    """Fields that a field parameter names, as a list."""
    if hasattr(algorithm, "parameterAsStrings"):
        return algorithm.parameterAsStrings(parameters, name, context)
    return algorithm.parameterAsFields(parameters, name, context)
