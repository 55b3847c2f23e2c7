"""Flags that tell where a simulated value deserves less trust."""

import numpy as np

from chansim.channels.absorption_tables import TEMPERATURES

# bit -> (meaning, threshold in words)
FLAGS = {
    1: ("masked", "no value: column outside the model or zenith angle of 85 degrees and more"),
    2: ("temperature_outside_tables", "a level is colder or warmer than the absorption tables"),
    4: ("particle_size_outside_tables", "an effective radius was clamped to the tables"),
    8: ("particle_size_parametrised", "effective radius by parametrisation, the model has none"),
    16: ("high_view_zenith", "70 degrees and more"),
    32: ("large_subcolumn_spread", "more than 10 K among subcolumns"),
    64: ("low_sun", "solar zenith angle of 80 to 90 degrees, channel below 5 um"),
}
HIGH_VIEW_ZENITH = 70.0  # degrees
LARGE_SPREAD = 10.0  # K
LOW_SUN = 80.0  # degrees


def quality_flags(valid, zenith, solar_zenith, spread, shortwave, temperature, above_ground, clamped, parametrised):
    """Flags of one piece of a simulation.

    Parameters
    ----------
    valid : (columns,) bool; zenith, solar_zenith : (columns,) [degrees], NaN where unknown
    spread : (channels, columns) [K]; shortwave : (channels,) bool
    temperature : (columns, levels) [K]; above_ground : the same shape, bool
    clamped, parametrised : (columns,) bool, of the effective radii

    Returns
    -------
    (channels, columns) int16, sums of the keys of `FLAGS`
    """
    outside = (temperature < TEMPERATURES[0]) | (temperature > TEMPERATURES[-1])
    flags = np.zeros(spread.shape, dtype=np.int16)
    low_sun = (solar_zenith >= LOW_SUN) & (solar_zenith < 90.0)
    for bit, where in (
        (1, ~valid),
        (2, (outside & above_ground).any(axis=1)),
        (4, clamped),
        (8, parametrised),
        (16, zenith >= HIGH_VIEW_ZENITH),
        (32, spread > LARGE_SPREAD),
        (64, low_sun & shortwave[:, None]),
    ):
        flags |= np.where(where, np.int16(bit), np.int16(0))
    return np.where(valid, flags, np.int16(1))


def flag_attributes():
    """CF attributes of the flag variable."""
    return {
        "flag_masks": np.array(list(FLAGS), dtype=np.int16),
        "flag_meanings": " ".join(name for name, _ in FLAGS.values()),
        "comment": "; ".join(f"{name}: {text}" for name, text in FLAGS.values()),
    }
