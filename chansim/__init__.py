"""chansim: weather-model output as an infrared satellite image.

    import chansim
    scene = chansim.open_scene("forecast.grib2")
    picture = chansim.simulate(scene, "tarn", channels=["wv063", "ir104"], view=("geostationary", 40.0))

A simulation is not an observation: official warnings and licensed practice come first.
"""

from chansim import _import_order  # noqa: F401, I001  (must stay first; see that module)
from chansim._version import __version__
from chansim.channels.imager import load_imager
from chansim.errors import ChansimError
from chansim.output import open_result
from chansim.satellite import Detector, simulate_on_grid
from chansim.scene.profiles import scene_from_profile
from chansim.scene.inferred_cloud import cloud_boundaries, with_inferred_cloud
from chansim.scene.reading import describe_scene, open_scene, scene_members, scene_times
from chansim.simulate import Settings, simulate

__all__ = [
    "ChansimError",
    "Detector",
    "Settings",
    "__version__",
    "cloud_boundaries",
    "describe_scene",
    "load_imager",
    "open_result",
    "open_scene",
    "scene_from_profile",
    "scene_members",
    "scene_times",
    "simulate",
    "simulate_on_grid",
    "with_inferred_cloud",
]
