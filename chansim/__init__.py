"""chansim: weather-model output as an infrared satellite image."""

from chansim import _import_order  # noqa: F401  (must stay first; see that module)
from chansim._version import __version__

__all__ = ["__version__"]
