"""geoclust: clusters in mapped field surveys, and where on the map they are."""

__version__ = "0.1.0"
