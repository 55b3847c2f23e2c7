"""What the detector makes of the picture: footprint of a pixel, noise, counts.

Everything happens in radiance, as in the instrument; brightness temperatures are made from it afterwards.
"""

import math
import zlib

import numpy as np
import xarray as xr

from chansim.errors import ViewError

SPREADS = ("box", "gaussian")
_SIGMAS = 3.0  # extent of the Gaussian in standard deviations
_FWHM = 2.0 * math.sqrt(2.0 * math.log(2.0))  # full width at half maximum of a Gaussian in standard deviations
_LEAST_SEEN = 0.5  # share of a footprint's weight that must have values
_COLDEST = 100.0  # K, brightness temperature of radiances that noise has brought below what such a body emits


def average_footprint(result, channels, factor, *, spread="box", width=1.0):
    """A picture made on finer pixels, seen with the footprint of the imager's own.

    Parameters
    ----------
    result : Dataset of `chansim.simulate` over (channel, y, x), made on `factor` x `factor` sub-pixels a pixel,
        e.g. on `FixedGrid.finer(factor)` or on the model's own grid
    channels : the channels of the imager (objects with `id`, `radiance`, `brightness_temperature`)
    factor : sub-pixels along each side of a pixel
    spread : "box", all of the pixel and nothing else; "gaussian", a point-spread function that overlaps neighbours
    width : full width at half maximum of the Gaussian, in pixels

    Returns
    -------
    xarray.Dataset like `result` with factor times fewer rows and columns. Radiances are averaged and turned into
    brightness temperature; other fields are averaged themselves. A pixel without values in half of its
    footprint has none.

    Raises
    ------
    ViewError : rows or columns are no multiple of `factor`, unknown spread, a channel is missing
    """
    dims = _picture_dims(result)
    weights = footprint_weights(factor, spread, width)
    by_id = _by_id(result, channels)
    averaged = {}
    for name, variable in result.data_vars.items():
        if not set(dims) <= set(variable.dims):
            averaged[name] = variable
            continue
        values = variable.transpose(..., *dims)
        if name.startswith("brightness_temperature"):
            radiance = _per_channel(values, by_id, "radiance")
            coarse = xr.DataArray(average_pixels(radiance, factor, weights), dims=values.dims, coords=_labels(values))
            coarse = coarse.copy(data=_per_channel(coarse, by_id, "brightness_temperature"))
        else:
            coarse = xr.DataArray(average_pixels(values.values, factor, weights), dims=values.dims)
        averaged[name] = (values.dims, coarse.values.astype(_float_type(variable)), variable.attrs)
    coarse = xr.Dataset(averaged, _coarse_coordinates(result, dims, factor), attrs=dict(result.attrs))
    coarse.attrs["footprint"] = f"{factor} x {factor} sub-pixels, {spread}" + (
        f", full width at half maximum {width:g} pixels" if spread == "gaussian" else ""
    )
    return coarse


def footprint_weights(factor, spread="box", width=1.0):
    """Weights of sub-pixels along one side, centred on a pixel.

    factor : sub-pixels a pixel; spread : "box" or "gaussian"; width : see `average_footprint`

    Returns
    -------
    array of `factor` or an even number more, symmetric, sum 1; the footprint is its outer product with itself [1]

    Raises ViewError for values that make no footprint.
    """
    if int(factor) != factor or factor < 1:
        raise ViewError(f"factor {factor}: give a whole number of sub-pixels along each side")
    if spread == "box":
        return np.full(int(factor), 1.0 / factor)
    if spread != "gaussian":
        raise ViewError(f"unknown spread {spread!r}; use one of {', '.join(SPREADS)}")
    if not 0.1 <= width <= 10.0:
        raise ViewError(f"width {width:g} pixels: give 0.1 to 10 (full width at half maximum)")
    sigma = width / _FWHM
    beyond = max(0, math.ceil((_SIGMAS * sigma - 0.5) * factor))
    offset = (np.arange(factor + 2 * beyond) - (factor - 1) / 2.0 - beyond) / factor
    weights = np.exp(-0.5 * (offset / sigma) ** 2)
    return weights / weights.sum()


def average_pixels(values, factor, weights):
    """Weighted means over footprints.

    Parameters
    ----------
    values : (..., rows, columns); missing values carry no weight
    factor : sub-pixels a pixel along each side
    weights : of `footprint_weights`, (n,) with n - factor even

    Returns
    -------
    (..., rows / factor, columns / factor); NaN where less than half of the weight has values (at the edge of the
    picture: of the weight that lies on it)

    Raises ViewError when rows or columns are no multiple of `factor`.
    """
    values = np.asarray(values, dtype=float)
    for axis, name in ((-2, "rows"), (-1, "columns")):
        if values.shape[axis] % factor:
            raise ViewError(f"{values.shape[axis]} {name} cannot be divided into pixels of {factor} sub-pixels")
    present = np.isfinite(values)
    filled, there, on_picture = np.where(present, values, 0.0), present.astype(float), np.ones(values.shape[-2:])
    for axis in (-2, -1):
        filled, there, on_picture = (_weighted_sum(a, factor, weights, axis) for a in (filled, there, on_picture))
    enough = there >= _LEAST_SEEN * on_picture - 1e-9
    return np.where(enough, filled / np.where(enough, there, 1.0), np.nan)


def _weighted_sum(values, factor, weights, axis):
    """Sums of weights times values around every pixel along an axis, nothing beyond the edges."""
    beyond = (weights.size - factor) // 2
    values = np.moveaxis(values, axis, -1)
    padded = np.pad(values, [(0, 0)] * (values.ndim - 1) + [(beyond, beyond)])
    count = values.shape[-1] // factor
    total = np.zeros((*values.shape[:-1], count))
    for k, weight in enumerate(weights):
        total += weight * padded[..., k : k + count * factor : factor][..., :count]
    return np.moveaxis(total, -1, axis)


def add_noise(result, channels, nedt, *, reference_temperature=300.0, seed=0):
    """Detector noise on a picture.

    Parameters
    ----------
    result : Dataset of `chansim.simulate` with `radiance` over (channel, ...)
    channels : see `average_footprint`
    nedt : noise-equivalent temperature difference, one number or {channel id: number} [K]
    reference_temperature : of the scene for which `nedt` holds [K]
    seed : whole number; the noise of a channel depends on it and on the channel's id alone

    Returns
    -------
    Dataset with noisy `radiance` and `brightness_temperature` (what is derived without noise stays). The noise is
    white, Gaussian, constant in radiance, so that cold scenes are noisier in temperature. Where noise brings a
    radiance below that of 100 K the brightness temperature is 100 K; their number is in the attributes

    Raises
    ------
    ViewError : negative or missing values of `nedt`, a reference temperature outside 150-400 K, a missing channel
    """
    if not 150.0 <= reference_temperature <= 400.0:
        raise ViewError(f"reference temperature {reference_temperature:g} K: give 150 to 400")
    by_id = _by_id(result, channels)
    noisy = result["radiance"].astype(float).copy(deep=True)
    words = []
    for i, channel in enumerate(by_id):
        value = _of_channel(nedt, channel.id, "nedt")
        generator = np.random.default_rng([int(seed), zlib.crc32(channel.id.encode())])
        deviation = noise_radiance(channel, value, reference_temperature)
        noisy[{"channel": i}] += deviation * generator.standard_normal(noisy.isel(channel=i).shape)
        words.append(f"{channel.id} {value:g} K")
    out = _with_radiance(result, noisy, by_id)
    out.attrs["noise"] = f"at {reference_temperature:g} K: {', '.join(words)}; seed {seed}{_cold_words(out)}"
    return out


def noise_radiance(channel, nedt, reference_temperature):
    """Standard deviation in radiance of a noise-equivalent temperature difference [mW m-2 sr-1 (cm-1)-1].

    nedt, reference_temperature [K]. dL = nedt * dL/dT at the reference temperature, by central difference over 0.2 K
    """
    upper, lower = (channel.radiance(reference_temperature + d) for d in (0.1, -0.1))
    return nedt * float(upper - lower) / 0.2


def quantise(result, channels, bits, *, warmest=330.0):
    """Counts of a digital detector: radiance in equal steps from 0 to that of the warmest scene.

    Parameters
    ----------
    result, channels : see `add_noise`
    bits : 6 to 16, one number or {channel id: number}
    warmest : brightness temperature of the largest count; what is warmer saturates there [K]

    Returns
    -------
    Dataset with stepped `radiance` and `brightness_temperature`; attribute `quantisation` with the number of
    saturated values

    Raises
    ------
    ViewError : bits or temperature out of range, a missing channel
    """
    if not 200.0 <= warmest <= 1000.0:
        raise ViewError(f"warmest {warmest:g} K: give 200 to 1000")
    by_id = _by_id(result, channels)
    stepped = result["radiance"].astype(float).copy(deep=True)
    saturated, words = 0, []
    for i, channel in enumerate(by_id):
        number = _of_channel(bits, channel.id, "bits")
        if number not in range(6, 17):
            raise ViewError(f"bits {number!r} of channel {channel.id}: give a whole number from 6 to 16")
        largest = 2 ** int(number) - 1
        step = float(channel.radiance(warmest)) / largest
        counts = np.rint(stepped.isel(channel=i).values / step)
        saturated += int(np.sum(counts > largest))
        stepped[{"channel": i}] = np.clip(counts, 0, largest) * step
        words.append(f"{channel.id} {int(number)} bits")
    out = _with_radiance(result, stepped, by_id)
    out.attrs["quantisation"] = (
        f"0 to the radiance of {warmest:g} K: {', '.join(words)}; {saturated} values saturated{_cold_words(out)}"
    )
    return out


def _with_radiance(result, radiance, by_id):
    """A copy of the result with another radiance and the brightness temperature that belongs to it."""
    out = result.copy()
    kind = result["radiance"].dtype
    out["radiance"] = radiance.astype(kind).assign_attrs(result["radiance"].attrs)
    temperature = result["brightness_temperature"].astype(float).copy(deep=True)
    radiance = radiance.transpose(*temperature.dims)
    for i, channel in enumerate(by_id):
        values = radiance.isel(channel=i).values
        floored = np.where(np.isfinite(values), np.maximum(values, channel.radiance(_COLDEST)), np.nan)
        temperature[{"channel": i}] = channel.brightness_temperature(floored)
    attributes = result["brightness_temperature"].attrs
    out["brightness_temperature"] = temperature.astype(result["brightness_temperature"].dtype).assign_attrs(attributes)
    return out


def _cold_words(result):
    count = int((result["brightness_temperature"] < _COLDEST + 0.01).sum())
    return f"; {count} values without signal set to {_COLDEST:g} K" if count else ""


def _picture_dims(result):
    dims = tuple(d for d in result["brightness_temperature"].dims if d != "channel")
    if len(dims) != 2:
        raise ViewError(f"the picture has dimensions {dims}; a footprint needs rows and columns")
    return dims


def _by_id(result, channels):
    """The channels in the order of the result."""
    known = {c.id: c for c in channels}
    wanted = [str(i) for i in result["channel"].values]
    missing = [i for i in wanted if i not in known]
    if missing:
        raise ViewError(f"channels {', '.join(missing)} of the picture are not among those given ({', '.join(known)})")
    return [known[i] for i in wanted]


def _of_channel(value, channel_id, name):
    if isinstance(value, dict):
        if channel_id not in value:
            raise ViewError(f"{name} has no value for channel {channel_id}; it has {', '.join(value)}")
        value = value[channel_id]
    if not np.isfinite(value) or value < 0.0:
        raise ViewError(f"{name} {value!r} of channel {channel_id}: give a number from 0")
    return value


def _per_channel(values, by_id, method):
    """Radiance or brightness temperature of an array (channel first), channel by channel."""
    pieces = [getattr(c, method)(values.isel(channel=i).values.astype(float)) for i, c in enumerate(by_id)]
    return np.stack(pieces, axis=values.dims.index("channel"))


def _labels(values):
    return {"channel": values["channel"].values}


def _float_type(variable):
    return variable.dtype if variable.dtype.kind == "f" else float


def _coarse_coordinates(result, dims, factor):
    """Coordinates of the pixels: means of those of the sub-pixels, places as means of directions."""
    coordinates = {n: c for n, c in result.coords.items() if not set(dims) & set(c.dims)}
    for name, coordinate in result.coords.items():
        if coordinate.dims in ((dims[0],), (dims[1],)):
            coordinates[name] = (
                coordinate.dims,
                coordinate.values.reshape(-1, factor).mean(axis=1),
                dict(coordinate.attrs),
            )
    if {"latitude", "longitude"} <= set(result.coords) and set(result["latitude"].dims) == set(dims):
        latitude, longitude = (result[n].transpose(*dims) for n in ("latitude", "longitude"))
        for like, values in zip((latitude, longitude), _mean_place(latitude.values, longitude.values, factor)):
            coordinates[like.name] = (dims, values, dict(like.attrs))
    return coordinates


def _mean_place(latitude, longitude, factor):
    phi, lam = np.radians(latitude), np.radians(longitude)
    box = footprint_weights(factor)
    vectors = np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)])
    x, y, z = average_pixels(vectors, factor, box)
    middle = np.degrees(np.arctan2(y, x))
    start = average_pixels(longitude, factor, box)
    # the turn of the source: 0-360 or -180-180
    turn = 360.0 if np.nanmax(longitude, initial=0.0) > 180.0 else 0.0
    middle = np.where(middle < 0.0, middle + turn, middle)
    return np.degrees(np.arctan2(z, np.hypot(x, y))), np.where(np.isfinite(start), middle, np.nan)
