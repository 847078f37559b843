"""Where the volatility of an option comes from (C7): source, quote conversion, smile."""

from .smile import FLAT, INDEX, MILD, SMILE_LADDER, STEEP, FlatSmile, Smile, SSVISmile
from .sources import ImpliedSeries, ImpliedSurface, RealisedVolatility, Volatility
from .surface import SurfaceQuotes

__all__ = [
    "FLAT",
    "INDEX",
    "MILD",
    "SMILE_LADDER",
    "STEEP",
    "FlatSmile",
    "ImpliedSeries",
    "ImpliedSurface",
    "RealisedVolatility",
    "SSVISmile",
    "Smile",
    "SurfaceQuotes",
    "Volatility",
]
