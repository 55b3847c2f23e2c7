"""What sunlight needs of condensate and of the sea: phase functions and the refractive index at the nodes of a channel."""

import numpy as np

from chansim.optics.condensate import SPECIES, at_nodes, condensate_moments, load_tables, radius_axis
from chansim.optics.refractive_index import refractive_index

SHORTWAVE = 2000.0  # cm-1: below 5 um sunlight matters
# rain, snow and graupel scatter like the largest droplets and crystals: beyond the forward peak, which delta scaling
# takes out, large particles that absorb differ little
_LIKE = {"rain": "cloud_liquid", "snow": "cloud_ice", "graupel": "cloud_ice"}


def scattering_angles():
    """Angles at which phase functions are tabulated, (angles,) [degrees]."""
    return load_tables()["angle"].values.astype(float)


def condensate_phase(wavenumber):
    """Phase function of every species: (species, radii, nodes, angles), mean over the sphere 1.

    wavenumber : (nodes,), above 2000 [cm-1]; shorter radius axes repeat their last entry

    Raises
    ------
    OpticsError : wavenumber outside the tables
    """
    out = [at_nodes(f"{_LIKE.get(species, species)}_phase", wavenumber, "solar_wavenumber") for species in SPECIES]
    for s, species in enumerate(SPECIES):
        if species in _LIKE:
            out[s][:] = out[s][-1]  # the last radius is the largest
    return np.stack(out)


def sunlit_optics(wavenumber, irradiance, ice_habit, streams):
    """Everything that the solar term needs at the nodes of all channels.

    Parameters
    ----------
    wavenumber : (nodes,) [cm-1]
    irradiance : (nodes,) solar spectral irradiance [mW m-2 (cm-1)-1]; 0 where sunlight is left out
    streams : of the solver, for each half-sphere

    Returns
    -------
    irradiance : (nodes,)
    slot : (nodes,) position in the arrays that follow, -1 where sunlight is left out
    moments : (species, radii, slots, 2 streams + 1)
    phase : (species, radii, slots, angles); angles : (angles,) [degrees]
    index : (slots, 2) refractive index of water, real and imaginary
    """
    sunlit = np.flatnonzero(irradiance > 0.0)
    slot = np.full(wavenumber.size, -1, dtype=np.int64)
    slot[sunlit] = np.arange(sunlit.size)
    nodes = wavenumber[sunlit]
    if sunlit.size == 0:
        most = int(max(radius_axis(species)[2] for species in SPECIES))
        empty = np.zeros((len(SPECIES), most, 0, 1))
        return irradiance, slot, empty, empty, np.zeros(1), np.zeros((0, 2))
    index = np.array([refractive_index("water", nu) for nu in nodes], dtype=complex)
    return (
        np.ascontiguousarray(irradiance),
        slot,
        np.ascontiguousarray(condensate_moments(nodes, ice_habit, 2 * streams + 1)),
        condensate_phase(nodes),
        scattering_angles(),
        np.ascontiguousarray(np.stack([index.real, index.imag], axis=1)),
    )
