"""An imager: a folder of response functions with a small TOML file.

id = "tarn"
name = "words for titles"
sub_satellite_longitude = 40.0        # optional, degrees east

[[channel]]
id = "wv063"
name = "upper-level water vapour"     # optional
response = "wv063.txt"                # text or netCDF, relative to this file
"""

import importlib.resources
import tomllib
from dataclasses import dataclass
from pathlib import Path

from chansim.channels.channel import ready_channel
from chansim.channels.response import make_response, read_response
from chansim.errors import ResponseError


@dataclass(frozen=True)
class Imager:
    """Channels that belong together.

    id, name : identifier and words for titles
    channels : tuple of Channel
    sub_satellite_longitude : [degrees_east] or None
    """

    id: str
    name: str
    channels: tuple
    sub_satellite_longitude: float | None = None

    def channel(self, channel_id):
        """One channel by its id. Raises ResponseError that lists what exists."""
        for channel in self.channels:
            if channel.id == channel_id:
                return channel
        raise unknown_channel(channel_id, self.id, [c.id for c in self.channels])


def unknown_channel(wanted, imager, existing):
    """The error for a channel that does not exist."""
    return ResponseError(f"imager {imager!r} has no channel {wanted!r}; it has {', '.join(existing)}")


def built_in_imagers():
    """Identifiers of the imagers that ship with chansim."""
    root = _built_in_folder()
    return sorted(f.name for f in root.iterdir() if (f / "imager.toml").is_file())


def _built_in_folder():
    try:
        return Path(str(importlib.resources.files("chansim.srf")))
    except ModuleNotFoundError:  # the source tree, where they lie beside the package
        return Path(__file__).parents[2] / "srf"


def load_imager(source="tarn", channels=None):
    """Load an imager, preparing its channels where that has not been done before.

    Parameters
    ----------
    source : id of a built-in imager, a folder with imager.toml, an imager.toml, a response file (text or CF
        netCDF), a sequence of response files, a dict {id: (coordinate, response)}, or an Imager
    channels : ids to use, in order; None = all

    Returns
    -------
    Imager

    Raises
    ------
    ResponseError : unknown imager or channel, a response that cannot be used
    """
    if isinstance(source, Imager):
        return _pick(source, channels)
    if isinstance(source, dict):
        responses = [(name, None, lambda n=name, v=value: make_response(*v, n)) for name, value in source.items()]
        return _prepare("custom", "custom channels", responses, channels)
    if isinstance(source, (list, tuple)):
        responses = [(Path(p).stem, None, lambda p=p: read_response(p)) for p in source]
        return _prepare("custom", "custom channels", responses, channels)
    path = Path(source)
    if not path.exists() and str(source) in built_in_imagers():
        path = _built_in_folder() / str(source)
    if path.is_dir():
        path = path / "imager.toml"
    if not path.is_file():
        raise ResponseError(
            f"no imager {str(source)!r}: give one of {', '.join(built_in_imagers())}, a folder with imager.toml, or a "
            "response file"
        )
    if path.suffix != ".toml":
        return _prepare(path.stem, path.stem, [(path.stem, None, lambda: read_response(path))], channels)
    return _from_toml(path, channels)


def _from_toml(path, channels):
    try:
        description = tomllib.loads(path.read_text(encoding="utf-8"))
        entries = description["channel"]
        responses = [
            (e["id"], e.get("name"), lambda e=e: read_response(path.parent / e["response"], e.get("select")))
            for e in entries
        ]
        identifier = description["id"]
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, KeyError, TypeError) as error:
        raise ResponseError(
            f"{path}: not an imager description ({error}); it needs id and one [[channel]] with id and response each"
        ) from None
    return _prepare(
        identifier, description.get("name", identifier), responses, channels, description.get("sub_satellite_longitude")
    )


def _prepare(identifier, name, responses, channels, longitude=None):
    existing = [r[0] for r in responses]
    wanted = existing if channels is None else list(channels)
    for channel in wanted:
        if channel not in existing:
            raise unknown_channel(channel, identifier, existing)
    by_id = {r[0]: r for r in responses}
    ready = [ready_channel(by_id[c][2](), channel_id=c, name=by_id[c][1]) for c in wanted]
    return Imager(identifier, name, tuple(ready), longitude)


def _pick(imager, channels):
    if channels is None:
        return imager
    picked = tuple(imager.channel(c) for c in channels)
    return Imager(imager.id, imager.name, picked, imager.sub_satellite_longitude)
