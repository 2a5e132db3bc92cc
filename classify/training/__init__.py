"""Training polygons become training pixels, and both are reviewed before any model is fitted."""

from classify.training.dataset import TrainingSet, read_pixels, write_pixels
from classify.training.pixels import PixelCaps, extract_pixels
from classify.training.polygons import PolygonSet, read_polygons

__all__ = [
    "PixelCaps",
    "PolygonSet",
    "TrainingSet",
    "extract_pixels",
    "read_pixels",
    "read_polygons",
    "write_pixels",
]
