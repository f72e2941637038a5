"""Grades radial-velocity signals: planet, or the star itself?"""

__all__ = ["__version__"]

__version__ = "0.1.0"
