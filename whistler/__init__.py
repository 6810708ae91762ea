"""L-values and equatorial electron densities from recordings of whistlers."""

__version__ = "0.1.0"
