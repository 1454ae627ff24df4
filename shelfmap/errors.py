"""Every error and warning shelfmap raises on purpose, under one root each."""

__all__ = [
    "CoastError",
    "FieldError",
    "GridError",
    "LayerError",
    "OutputExistsError",
    "ResponseError",
    "SettingsError",
    "ShelfmapError",
    "ShelfmapWarning",
    "TransectError",
]


class ShelfmapError(Exception):
    """Root of all errors raised on purpose; its message says what to do."""


class SettingsError(ShelfmapError, ValueError):
    """A setting is misspelt, of the wrong kind or out of its range."""


class GridError(ShelfmapError, ValueError):
    """A bathymetry raster cannot be read or cannot be understood."""


class CoastError(ShelfmapError, ValueError):
    """No usable coast can be made of the grid or of the shoreline file."""


class TransectError(ShelfmapError, ValueError):
    """Transects cannot be laid out or read."""


class ResponseError(ShelfmapError, ValueError):
    """The long-wave response is asked of arrays that do not fit together."""


class FieldError(ShelfmapError, ValueError):
    """A region's 2-D response cannot be computed: its waters, its open edge or its size are not as they must be."""


class LayerError(ShelfmapError, OSError):
    """A layer file cannot be written, read or replaced."""


class OutputExistsError(ShelfmapError, FileExistsError):
    """A file to be written is there already and may not be overwritten."""


class ShelfmapWarning(UserWarning):
    """Something the caller can change made a result weaker than it could be."""
