"""Errors that chansim raises on purpose.

Each message says what was wrong, where, and what to do about it. All of them
derive from `ChansimError`, so a script can catch one class.
"""


class ChansimError(Exception):
    """Base of all errors that chansim raises on purpose."""


class SceneError(ChansimError, ValueError):
    """The model file or Dataset cannot be turned into a canonical scene."""


class ResponseError(ChansimError, ValueError):
    """A spectral response function cannot be used."""


class ViewError(ChansimError, ValueError):
    """The viewing geometry is impossible or does not see the scene."""


class OpticsError(ChansimError, ValueError):
    """Cloud or surface optical input is impossible."""


class OutputError(ChansimError, OSError):
    """A result cannot be written where it was asked for."""


class DataError(ChansimError, RuntimeError):
    """A data file of the package (atlas, tables) is missing or damaged."""
