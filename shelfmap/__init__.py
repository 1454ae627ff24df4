"""Where tides and other long waves grow on a continental shelf, from a bathymetry grid."""

__version__ = "0.1.0"
