"""All columns, all channels: the compiled driver of the column solvers.

Plain arrays only. Each column is built once (columns.py); for each channel its
nodes are solved clear and, where there is condensate, cloudy, subcolumn by
subcolumn. Columns are independent: results do not depend on the number of
threads.
"""

import concurrent.futures
import math
import os

import numpy as np
from numba import njit

from chansim.constants import EARTH_RADIUS, STANDARD_GRAVITY
from chansim.planck import planck_scalar
from chansim.transfer.absorbing import (
    STEEPEST,
    absorbed_fraction,
    absorbing_radiance,
    bend_weight,
    density_slope,
    far_weight,
    middle_factor,
    source_bend,
)
from chansim.transfer.columns import build_levels, hydrostatic_heights, layer_amounts, layer_secants
from chansim.transfer.overlap import fill_subcolumn
from chansim.transfer.scattering import thermal_radiance
from chansim.transfer.scattering import work_arrays as scattering_work_arrays
from chansim.transfer.sunlight import clear_sunlight, cloudy_sunlight, toward_imager
from chansim.transfer.sunlight import work_arrays as sunlight_work_arrays


@njit(cache=True)
def table_position(log_first, log_step, size, t_first, t_step, t_size, pressure, temperature):
    """Where (pressure, temperature) lies in the table: (ip, it, weight in p, three weights in T).

    Linear in p between the grid pressures (wings are proportional to p), quadratic in T.
    """
    x = (math.log(pressure) - log_first) / log_step
    ip = min(max(int(x), 0), size - 2)
    p1 = math.exp(log_first + ip * log_step)
    p2 = math.exp(log_first + (ip + 1) * log_step)
    wp = min(max((pressure - p1) / (p2 - p1), 0.0), 1.0)
    y = min(max((temperature - t_first) / t_step, 0.0), t_size - 1.0)
    it = min(max(int(y + 0.5), 1), t_size - 2)
    d = y - it
    return ip, it - 1, wp, 0.5 * d * (d - 1.0), 1.0 - d * d, 0.5 * d * (d + 1.0)


@njit(cache=True)
def table_positions(layers, effective_p, effective_t, grid, table, corner, share):
    """Where every layer lies in the table, for each weighting: corner (weightings, layers, 2), share (.., .., 6)."""
    log_first, log_step, t_first, t_step = grid
    for k in range(effective_p.shape[0]):
        for j in range(layers):
            ip, it, wp, w0, w1, w2 = table_position(
                log_first,
                log_step,
                table.shape[0],
                t_first,
                t_step,
                table.shape[1],
                effective_p[k, j],
                effective_t[k, j],
            )
            corner[k, j, 0], corner[k, j, 1] = ip, it
            share[k, j, 0], share[k, j, 1], share[k, j, 2] = (1.0 - wp) * w0, (1.0 - wp) * w1, (1.0 - wp) * w2
            share[k, j, 3], share[k, j, 4], share[k, j, 5] = wp * w0, wp * w1, wp * w2


@njit(cache=True, fastmath=True)
def _add_slot(table, slot, corner, share, amount, first, last, tau):
    """tau[i] += amount x cross-section at a position, for the nodes first..last of one slot."""
    ip, it = corner[0], corner[1]
    a, b, c = amount * share[0], amount * share[1], amount * share[2]
    d, e, f = amount * share[3], amount * share[4], amount * share[5]
    for i in range(first, last):
        tau[i - first] += (
            a * table[ip, it, slot, i]
            + b * table[ip, it + 1, slot, i]
            + c * table[ip, it + 2, slot, i]
            + d * table[ip + 1, it, slot, i]
            + e * table[ip + 1, it + 1, slot, i]
            + f * table[ip + 1, it + 2, slot, i]
        )


@njit(cache=True)
def gas_optical_depth(layers, amount, corner, share, table, first, last, tau):
    """Vertical optical depths of the gases: tau (layers, nodes of the channel)."""
    for j in range(layers):
        tau[j, : last - first] = 0.0
        for s in range(amount.shape[0]):
            if amount[s, j] != 0.0:
                k = s if s < 2 else s - 1  # slots: air, water, water again, gases; weightings: air, water, gases
                _add_slot(table, s, corner[k, j], share[k, j], amount[s, j], first, last, tau[j])
        for i in range(last - first):
            tau[j, i] = max(tau[j, i], 0.0)


@njit(cache=True)
def level_planck(levels, temperature, wavenumber, first, last, planck_level):
    """Planck function at the levels: (levels, nodes of the channel)."""
    for j in range(levels):
        for i in range(first, last):
            planck_level[j, i - first] = planck_scalar(wavenumber[i], temperature[j])


@njit(cache=True)
def source_bends(layers, level_p, level_t, tau, planck_level, wavenumber, first, last, bend):
    """Bend of the source of each layer from the gases (see absorbing.py): bend (layers, nodes of the channel)."""
    for j in range(layers):
        up, down = max(j - 1, 0), min(j + 1, layers - 1)
        thickness = math.log(level_p[j + 1] / level_p[j])
        thickness_up = math.log(level_p[up + 1] / level_p[up])
        thickness_down = math.log(level_p[down + 1] / level_p[down])
        span = (thickness_up if up < j else 0.0) + (thickness_down if down > j else 0.0)
        span = 0.5 * (span + thickness * ((up < j) + (down > j)))  # between the middles of the layers compared
        for i in range(last - first):
            slope = 0.0
            if span > 0.0:
                slope = (
                    2.0
                    * thickness
                    / span
                    * density_slope(tau[up, i] / thickness_up, tau[j, i] / thickness, tau[down, i] / thickness_down)
                )
            factor = middle_factor(wavenumber[first + i], level_t[j], level_t[j + 1])
            bend[j, i] = source_bend(
                planck_level[j, i], planck_level[j + 1, i], factor, min(max(slope, -STEEPEST), STEEPEST)
            )


@njit(cache=True)
def clear_channel(
    layers, tau, secant, planck_level, bend, planck_surface, emissivity, weight, first, last, state, profile
):
    """Clear-sky radiance and transmittance of a channel.

    profile : (levels,) result, channel-mean transmittance from each level to the top
    state : (3, nodes) work
    """
    n = last - first
    for i in range(n):
        state[0, i], state[1, i], state[2, i] = 0.0, 0.0, 1.0
    profile[0] = 1.0
    for j in range(layers):
        mean = 0.0
        for i in range(n):
            path = tau[j, i] * secant[j]
            absorbed = absorbed_fraction(path)
            w = far_weight(path, absorbed)
            bent = bend[j, i] * bend_weight(path, absorbed)
            above, below = planck_level[j, i], planck_level[j + 1, i]
            state[0, i] += state[2, i] * (absorbed * (above + (below - above) * w) + bent)
            state[1, i] = state[1, i] * (1.0 - absorbed) + absorbed * (below + (above - below) * w) + bent
            state[2, i] *= 1.0 - absorbed
            mean += weight[first + i] * state[2, i]
        profile[j + 1] = mean
    radiance = 0.0
    for i in range(n):
        radiance += weight[first + i] * (
            state[0, i] + state[2, i] * (emissivity * planck_surface[i] + (1.0 - emissivity) * state[1, i])
        )
    return radiance


@njit(cache=True)
def particle_index(log_radius, log_first, log_step, size):
    """Position on a radius axis uniform in ln r, clamped at its ends: (index, weight)."""
    y = min(max((log_radius - log_first) / log_step, 0.0), size - 1.0)
    i = min(int(y), size - 2)
    return i, y - i


@njit(cache=True)
def cloud_layer_optics(path, log_radius, axis, extinction, albedo, asymmetry, first, last, tau, omega, g):
    """Mixed optical properties of all condensate in one layer, for the nodes of a channel.

    path : (species,) [kg m-2]; log_radius : (species,) ln of the effective radius [m]
    axis : (species, 3) ln first radius, ln step, size; extinction.. : (species, radii, nodes)
    tau, omega, g : (nodes,) results: extinction optical thickness, single-scattering albedo, asymmetry
    """
    n = last - first
    for i in range(n):
        tau[i], omega[i], g[i] = 0.0, 0.0, 0.0
    for s in range(path.size):
        if path[s] <= 0.0:
            continue
        r, w = particle_index(log_radius[s], axis[s, 0], axis[s, 1], int(axis[s, 2]))
        for i in range(n):
            k = first + i
            e = path[s] * (extinction[s, r, k] * (1.0 - w) + extinction[s, r + 1, k] * w)
            a = albedo[s, r, k] * (1.0 - w) + albedo[s, r + 1, k] * w
            tau[i] += e
            omega[i] += e * a
            g[i] += e * a * (asymmetry[s, r, k] * (1.0 - w) + asymmetry[s, r + 1, k] * w)
    for i in range(n):
        if omega[i] > 0.0:
            g[i] /= omega[i]
        if tau[i] > 0.0:
            omega[i] /= tau[i]


@njit(cache=True)
def peak_layer(layers, level_p, profile):
    """Layer in which -d(transmittance)/d(ln p) is largest."""
    best, where = -1.0, 0
    for j in range(layers):
        value = (profile[j] - profile[j + 1]) / math.log(level_p[j + 1] / level_p[j])
        if value > best:
            best, where = value, j
    return where


# what `solve_columns` returns for each channel and column, in order
SOLVERS = {"absorbing": 0, "scattering": 1}  # what users may name
RESULTS = (
    "radiance",
    "radiance_clear",
    "transmittance",
    "cloud_optical_thickness",
    "peak_pressure",
    "peak_height",
    "radiance_solar",
    "spread",
)
_BLOCK = 512  # columns of one task, which share one set of work arrays


@njit(cache=True)
def _layer_condensate(layers, level_p, level_z, layer_cell, mixing, log_radius, fraction, path, radius):
    """Condensate path of each layer inside the cloudy part [kg m-2] and ln effective radius: (layers, species)."""
    for j in range(layers):
        cell = layer_cell[j]
        gravity = STANDARD_GRAVITY * (EARTH_RADIUS / (EARTH_RADIUS + 0.5 * (level_z[j] + level_z[j + 1]))) ** 2
        for s in range(mixing.shape[0]):
            path[j, s] = 0.0
            if cell >= 0 and mixing[s, cell] > 0.0 and fraction[cell] > 0.0:
                path[j, s] = mixing[s, cell] / fraction[cell] * (level_p[j + 1] - level_p[j]) / gravity
                radius[j, s] = log_radius[s, cell]


@njit(cache=True)
def _cloudy_profile(layers, tau, secant, cloud_tau, cloud_omega, weight, first, last, profile):
    """Channel-mean transmittance from each level to the top, absorption alone: profile (layers + 1,)."""
    profile[: layers + 1] = 0.0
    for i in range(last - first):
        through = 1.0
        profile[0] += weight[first + i]
        for j in range(layers):
            through *= math.exp(-(tau[j, i] + cloud_tau[j, i] * (1.0 - cloud_omega[j, i])) * secant[j])
            if through < 1e-9:
                break
            profile[j + 1] += weight[first + i] * through


@njit(cache=True)
def _absorbing_cloudy(
    layers, tau, secant, cloud_tau, cloud_omega, planck_level, bend, planck_surface, emissivity, weight, first, last,
    work
):  # fmt: skip
    """Channel radiance with condensate as an absorber. work : (2, layers)"""
    slant, bent = work[0, :layers], work[1, :layers]
    radiance = 0.0
    for i in range(last - first):
        for j in range(layers):
            total = tau[j, i] + cloud_tau[j, i] * (1.0 - cloud_omega[j, i])
            slant[j] = total * secant[j]
            bent[j] = bend[j, i] * tau[j, i] / total if total > 0.0 else 0.0
        value, _ = absorbing_radiance(slant, planck_level[: layers + 1, i], bent, planck_surface[i], emissivity)
        radiance += weight[first + i] * value
    return radiance


@njit(cache=True)
def _mixed_moments(layers, path, radius, inside, axis, extinction, albedo, moments, node, slot, out):
    """Legendre moments of the mixed condensate of each layer: out (layers, moments).

    node : of extinction and albedo; slot : the same node on the node axis of moments
    """
    count = moments.shape[3]
    for j in range(layers):
        if not inside[j]:
            continue
        scattered = 0.0
        out[j, :count] = 0.0
        for s in range(path.shape[1]):
            if path[j, s] <= 0.0:
                continue
            r, w = particle_index(radius[j, s], axis[s, 0], axis[s, 1], int(axis[s, 2]))
            for k in range(2):
                share = (1.0 - w) if k == 0 else w
                part = path[j, s] * share * extinction[s, r + k, node] * albedo[s, r + k, node]
                scattered += part
                for degree in range(count):
                    out[j, degree] += part * moments[s, r + k, slot, degree]
        for degree in range(count):
            out[j, degree] /= scattered


@njit(cache=True)
def _scattering_cloudy(
    layers, tau, secant, cloud_tau, cloud_omega, path, radius, inside, optics, planck_level, bend, planck_surface,
    emissivity, weight, first, last, view_cosine, solver
):  # fmt: skip
    """Channel radiance with multiple scattering."""
    axis, extinction, albedo, _, moments = optics
    quad, matrices, vectors, mixed, state = solver
    radiance = 0.0
    for i in range(last - first):
        _mixed_moments(layers, path, radius, inside, axis, extinction, albedo, moments, first + i, first + i, mixed)
        radiance += weight[first + i] * thermal_radiance(
            tau[:layers, i], secant[:layers], cloud_tau[:layers, i], cloud_omega[:layers, i], mixed[:layers],
            planck_level[: layers + 1, i], bend[:layers, i], planck_surface[i], emissivity, 1.0, view_cosine, quad,
            (matrices, vectors), state
        )  # fmt: skip
    return radiance


@njit(cache=True)
def _mixed_phase(layers, path, radius, inside, axis, extinction, albedo, phase, node, slot, angle, share, out):
    """Phase function of the mixed condensate of each layer at a scattering angle: out (layers,).

    angle, share : the angle lies this share of the way beyond the tabulated one
    """
    for j in range(layers):
        if not inside[j]:
            continue
        scattered = 0.0
        out[j] = 0.0
        for s in range(path.shape[1]):
            if path[j, s] <= 0.0:
                continue
            r, w = particle_index(radius[j, s], axis[s, 0], axis[s, 1], int(axis[s, 2]))
            for k in range(2):
                part = path[j, s] * ((1.0 - w) if k == 0 else w) * extinction[s, r + k, node] * albedo[s, r + k, node]
                scattered += part
                at = phase[s, r + k, slot]
                out[j] += part * (at[angle] * (1.0 - share) + at[angle + 1] * share)
        out[j] /= scattered


@njit(cache=True)
def _sunlight_cloudy(
    layers, tau, secant, cloud_tau, cloud_omega, path, radius, inside, optics, sunlit, geometry, ground, reflectance,
    weight, first, last, solver
):  # fmt: skip
    """Channel radiance of sunlight for one subcolumn with condensate."""
    axis, extinction, albedo, _, _ = optics
    irradiance, slots, moments, phase, angles, _ = sunlit
    quad, work, mixed, phases = solver
    sun, azimuth, view = geometry
    sines = math.sqrt(max(0.0, (1.0 - sun * sun) * (1.0 - view * view)))
    turned = math.degrees(math.acos(min(max(-sun * view - sines * azimuth, -1.0), 1.0)))
    angle = min(max(np.searchsorted(angles, turned) - 1, 0), angles.size - 2)
    share = (turned - angles[angle]) / (angles[angle + 1] - angles[angle])
    for i in range(last - first):
        slot = slots[first + i]
        _mixed_moments(layers, path, radius, inside, axis, extinction, albedo, moments, first + i, slot, mixed[i])
        _mixed_phase(
            layers, path, radius, inside, axis, extinction, albedo, phase, first + i, slot, angle, share, phases[i]
        )
    return cloudy_sunlight(
        layers, tau, secant, cloud_tau, cloud_omega, mixed, phases, geometry, ground, reflectance, irradiance, weight,
        first, last, quad, work
    )  # fmt: skip


@njit(cache=True)
def _subcolumn_masks(cells, fraction, height, overlap, decorrelation_length, count, masks, share):
    """Different subcolumns of one column and the share of each; returns how many."""
    different = 0
    for s in range(count):
        fill_subcolumn(fraction, height, overlap, decorrelation_length, s, count, masks[different])
        same = -1
        for m in range(different):
            equal = True
            for k in range(cells):
                if masks[m, k] != masks[different, k]:
                    equal = False
                    break
            if equal:
                same = m
                break
        if same >= 0:
            share[same] += 1.0 / count
        else:
            share[different] = 1.0 / count
            different += 1
    return different


@njit(cache=True)
def _cloudy_cells(mixing, fraction, pressure, surface_pressure, cloudy):
    """Mark the cells above ground that hold condensate; True if there is any."""
    found = False
    for k in range(cloudy.size):
        cloudy[k] = False
        for s in range(mixing.shape[0]):
            if mixing[s, k] > 0.0 and fraction[k] > 0.0 and pressure[k] < surface_pressure:
                cloudy[k] = True
                found = True
    return found


@njit(cache=True)
def _cloud_of_subcolumn(layers, layer_cell, mask, cloudy, path, radius, optics, first, last, inside, fields):
    """Optical properties of the condensate of one subcolumn, zero elsewhere; True if there is any.

    inside : (layers,) bool result; fields : extinction optical thickness, albedo, asymmetry (layers, nodes), results
    """
    axis, extinction, albedo, asymmetry, _ = optics
    cloud_tau, cloud_omega, cloud_g = fields
    found = False
    for j in range(layers):
        cell = layer_cell[j]
        inside[j] = cell >= 0 and mask[cell] and cloudy[cell]
        if inside[j]:
            found = True
            cloud_layer_optics(path[j], radius[j], axis, extinction, albedo, asymmetry, first, last, cloud_tau[j],
                               cloud_omega[j], cloud_g[j])  # fmt: skip
        else:
            cloud_tau[j, : last - first] = 0.0
            cloud_omega[j, : last - first] = 0.0
            cloud_g[j, : last - first] = 0.0
    return found


@njit(cache=True)
def _column_state(c, atmosphere, surface, reference, cloud, view_cosine, table, grid, options, work):
    """Levels, absorber amounts, condensate and subcolumns of column c into the work arrays.

    Returns
    -------
    number of levels, number of different subcolumns (0: no condensate)
    """
    pressure, temperature, humidity, gases, half_pressure = atmosphere
    surface_pressure, air_temperature, air_humidity, _, surface_height = surface
    ref_pressure, ref_temperature, ref_gases = reference
    mixing, log_radius, fraction = cloud
    overlap, decorrelation_length, count, _ = options
    level_work, gas_work, _, cloud_work, _, _ = work
    points, level_p, level_t, level_x, level_z, layer_cell = level_work
    amount, effective_p, effective_t, corner, share, secant = gas_work
    cloudy, path, radius, _, masks, portion, cell_height, _, _ = cloud_work
    row = c if pressure.shape[0] > 1 else 0
    any_cloud = _cloudy_cells(mixing[:, c], fraction[c], pressure[row], surface_pressure[c], cloudy)
    levels = build_levels(
        pressure[row], temperature[c], humidity[c], gases[:, c], half_pressure[row], cloudy, surface_pressure[c],
        air_temperature[c], air_humidity[c], ref_pressure, ref_temperature[c], ref_gases[:, c], points, level_p,
        level_t, level_x, layer_cell,
    )  # fmt: skip
    layers = levels - 1
    hydrostatic_heights(levels, level_p, level_t, level_x, surface_height[c], level_z)
    layer_amounts(levels, level_p, level_t, level_x, level_z, amount, effective_p, effective_t)
    table_positions(layers, effective_p, effective_t, grid, table, corner, share)
    layer_secants(levels, level_z, surface_height[c], view_cosine[c], secant)
    if not any_cloud:
        return levels, 0
    _layer_condensate(layers, level_p, level_z, layer_cell, mixing[:, c], log_radius[:, c], fraction[c], path, radius)
    for j in range(layers):
        if layer_cell[j] >= 0:
            cell_height[layer_cell[j]] = level_z[j]
    return levels, _subcolumn_masks(
        cloudy.size, fraction[c], cell_height, overlap, decorrelation_length, count, masks, portion
    )


@njit(cache=True)
def _clear_fields(c, channel, levels, surface, tables, work):
    """Gas optical depths, Planck functions and source bends of one channel into the work arrays."""
    table, _, wavenumber, _, firsts = tables
    level_work, gas_work, clear_work, _, _, _ = work
    _, level_p, level_t, _, _, _ = level_work
    amount, _, _, corner, share, _ = gas_work
    tau, planck_level, planck_surface, bend, _, _, _ = clear_work
    first, last = firsts[channel], firsts[channel + 1]
    gas_optical_depth(levels - 1, amount, corner, share, table, first, last, tau)
    level_planck(levels, level_t, wavenumber, first, last, planck_level)
    source_bends(levels - 1, level_p, level_t, tau, planck_level, wavenumber, first, last, bend)
    for i in range(first, last):
        planck_surface[i - first] = planck_scalar(wavenumber[i], surface[3][c])


@njit(cache=True)
def _ground_for_sun(c, first, last, sun, sunlit, view_cosine, reflectance, ground):
    """Bidirectional reflectance of the ground at the nodes of a channel; False where there is no sunlight."""
    sun_cosine, azimuth_cosine, sea_share, wind_speed = sun
    slots, index = sunlit[1], sunlit[5]
    if not sun_cosine[c] > 0.0 or slots[first] < 0:
        return False
    for i in range(first, last):
        ground[i - first] = toward_imager(
            view_cosine[c], sun_cosine[c], azimuth_cosine[c], wind_speed[c], index[slots[i]], sea_share[c], reflectance
        )
    return True


@njit(cache=True)
def _cloudy_radiance(
    c, channel, levels, emissivity, optics, sunlit, sun, sunny, view_cosine, tables, scattering, quad, solar_quad, work
):  # fmt: skip
    """Thermal and solar radiance of the subcolumn whose condensate is in the work arrays."""
    _, _, _, weight, firsts = tables
    _, gas_work, clear_work, cloud_work, solver_work, solar_work = work
    secant = gas_work[5]
    tau, planck_level, planck_surface, bend, _, _, _ = clear_work
    _, path, radius, fields, _, _, _, slant, inside = cloud_work
    first, last, layers = firsts[channel], firsts[channel + 1], levels - 1
    solar = 0.0
    if not scattering:
        return _absorbing_cloudy(
            layers, tau, secant, fields[0], fields[1], planck_level, bend, planck_surface, emissivity, weight, first,
            last, slant,
        ), solar  # fmt: skip
    thermal = _scattering_cloudy(
        layers, tau, secant, fields[0], fields[1], path, radius, inside, optics, planck_level, bend, planck_surface,
        emissivity, weight, first, last, view_cosine[c], (quad, *solver_work),
    )  # fmt: skip
    if sunny:
        ground, arrays, mixed, phases = solar_work
        solar = _sunlight_cloudy(
            layers, tau, secant, fields[0], fields[1], path, radius, inside, optics, sunlit,
            (sun[0][c], sun[1][c], view_cosine[c]), ground, 1.0 - emissivity, weight, first, last,
            (solar_quad, arrays, mixed, phases),
        )  # fmt: skip
    return thermal, solar


@njit(cache=True)
def _one_column(
    c, atmosphere, surface, reference, cloud, optics, sunlit, sun, view_cosine, emissivity, tables, options, quad,
    solar_quad, work, results,
):  # fmt: skip
    """Solve all channels of column c; see `solve_columns`."""
    _, _, _, weight, firsts = tables
    scattering = options[3]
    level_work, gas_work, clear_work, cloud_work, _, solar_work = work
    level_p, level_z, layer_cell = level_work[1], level_work[4], level_work[5]
    secant = gas_work[5]
    tau, planck_level, planck_surface, bend, state, profile, mean_profile = clear_work
    cloudy, path, radius, fields, masks, portion, _, _, inside = cloud_work
    levels, different = _column_state(
        c, atmosphere, surface, reference, cloud, view_cosine, tables[0], tables[1], options, work
    )
    layers = levels - 1
    for channel in range(firsts.size - 1):
        first, last = firsts[channel], firsts[channel + 1]
        e = emissivity[channel, c]
        _clear_fields(c, channel, levels, surface, tables, work)
        clear = clear_channel(
            layers, tau, secant, planck_level, bend, planck_surface, e, weight, first, last, state, profile
        )
        sunny = _ground_for_sun(c, first, last, sun, sunlit, view_cosine, 1.0 - e, solar_work[0])
        clear_solar = 0.0
        if sunny:
            clear_solar = clear_sunlight(layers, tau, secant, sun[0][c], solar_work[0], sunlit[0], weight, first, last)
            clear += clear_solar
        total, total_solar, squares, thickness = clear, clear_solar, clear * clear, 0.0
        mean_profile[:levels] = profile[:levels]
        if different > 0:
            total = total_solar = squares = 0.0
            mean_profile[:levels] = 0.0
        for m in range(different):
            if not _cloud_of_subcolumn(
                layers, layer_cell, masks[m], cloudy, path, radius, optics, first, last, inside, fields
            ):
                total += portion[m] * clear
                total_solar += portion[m] * clear_solar
                squares += portion[m] * clear * clear
                mean_profile[:levels] += portion[m] * profile[:levels]
                continue
            _cloudy_profile(layers, tau, secant, fields[0], fields[1], weight, first, last, state[3])
            thermal, solar = _cloudy_radiance(
                c, channel, levels, e, optics, sunlit, sun, sunny, view_cosine, tables, scattering, quad, solar_quad,
                work,
            )  # fmt: skip
            total += portion[m] * (thermal + solar)
            total_solar += portion[m] * solar
            squares += portion[m] * (thermal + solar) ** 2
            mean_profile[:levels] += portion[m] * state[3, :levels]
            for j in range(layers):
                for i in range(last - first):
                    thickness += portion[m] * weight[first + i] * fields[0][j, i]
        peak = peak_layer(layers, level_p, mean_profile)
        results[0, channel, c] = total
        results[1, channel, c] = clear
        results[2, channel, c] = mean_profile[levels - 1]
        results[3, channel, c] = thickness
        results[4, channel, c] = math.sqrt(level_p[peak] * level_p[peak + 1])
        results[5, channel, c] = 0.5 * (level_z[peak] + level_z[peak + 1])
        results[6, channel, c] = total_solar
        results[7, channel, c] = math.sqrt(max(squares - total * total, 0.0))


@njit(cache=True)
def _work_arrays(model_levels, ref_levels, gases, species, nodes, sunlit_nodes, subcolumns, streams, solar_streams):
    """Work space of one task, in the groups that `_one_column` unpacks."""
    size = 2 * model_levels + ref_levels + 110
    source = model_levels + ref_levels + 2
    points = (np.empty(source), np.empty(source), np.empty((1 + gases, source)), np.empty(source, dtype=np.int64))
    level_work = (points, np.empty(size), np.empty(size), np.empty((1 + gases, size)), np.empty(size),
                  np.empty(size, dtype=np.int64))  # fmt: skip
    gas_work = (np.empty((3 + gases, size)), np.empty((2 + gases, size)), np.empty((2 + gases, size)),
                np.empty((2 + gases, size, 2), dtype=np.int64), np.empty((2 + gases, size, 6)), np.empty(size))  # fmt: skip
    clear_work = (np.empty((size, nodes)), np.empty((size, nodes)), np.empty(nodes), np.empty((size, nodes)),
                  np.empty((4, max(size, nodes))), np.empty(size), np.empty(size))  # fmt: skip
    fields = (np.empty((size, nodes)), np.empty((size, nodes)), np.empty((size, nodes)))
    cloud_work = (np.empty(model_levels, dtype=np.bool_), np.empty((size, species)), np.zeros((size, species)), fields,
                  np.empty((subcolumns + 1, model_levels), dtype=np.bool_), np.empty(subcolumns + 1),
                  np.zeros(model_levels), np.empty((2, size)), np.empty(size, dtype=np.bool_))  # fmt: skip
    matrices, vectors = scattering_work_arrays(streams)
    solver_work = (matrices, vectors, np.zeros((size, 2 * streams + 1)), np.zeros(2))
    solar_work = (np.empty(nodes), sunlight_work_arrays(solar_streams, size),
                  np.zeros((sunlit_nodes, size, 2 * solar_streams + 1)), np.zeros((sunlit_nodes, size)))  # fmt: skip
    return level_work, gas_work, clear_work, cloud_work, solver_work, solar_work


@njit(cache=True, nogil=True)
def _solve_range(
    start, stop, valid, atmosphere, surface, reference, cloud, optics, sunlit, sun, view_cosine, emissivity, tables,
    options, quad, solar_quad, results,
):  # fmt: skip
    """Columns start..stop - 1 of `solve_columns`; runs without the interpreter lock."""
    firsts = tables[4]
    nodes, sunlit_nodes = 0, 0
    for channel in range(firsts.size - 1):
        nodes = max(nodes, firsts[channel + 1] - firsts[channel])
        if sunlit[1][firsts[channel]] >= 0:
            sunlit_nodes = max(sunlit_nodes, firsts[channel + 1] - firsts[channel])
    work = _work_arrays(
        atmosphere[1].shape[1], reference[0].size, atmosphere[3].shape[0], cloud[0].shape[0], nodes, sunlit_nodes,
        options[2], quad[0].size, solar_quad[0].size,
    )  # fmt: skip
    for c in range(start, stop):
        if valid[c]:
            _one_column(
                c, atmosphere, surface, reference, cloud, optics, sunlit, sun, view_cosine, emissivity, tables,
                options, quad, solar_quad, work, results,
            )  # fmt: skip
        else:
            results[:, :, c] = np.nan


def solve_columns(
    valid, atmosphere, surface, reference, cloud, optics, sunlit, sun, view_cosine, emissivity, tables, options, quad,
    solar_quad, results, threads=None,
):  # fmt: skip
    """Solve many columns.

    Parameters
    ----------
    valid : (columns,) bool; other columns get NaN
    atmosphere : pressure (1 or columns, L) [Pa], temperature (columns, L) [K], specific humidity (columns, L),
        gases (G, columns, L) mole fractions with NaN for "use the reference", half-level pressure (1 or columns, L + 1)
    surface : (columns,) each: pressure [Pa], air temperature [K] or NaN, air humidity or NaN, skin temperature [K],
        height [m]
    reference : pressure (R,) [Pa], temperature (columns, R) [K], gases (1 + G, columns, R) with water first
    cloud : mass mixing ratios (S, columns, L) [kg kg-1], ln effective radius [m] (S, columns, L),
        cloud fraction (columns, L)
    optics : axis (S, 3), extinction [m2 kg-1], single-scattering albedo, asymmetry (S, radii, nodes), Legendre
        moments (S, radii, nodes, 2 streams + 1)
    sunlit : see `chansim.optics.phase.sunlit_optics`
    sun : cosine of the solar zenith angle (<= 0: no sunlight), cosine of the azimuth between imager and sun, share of
        the surface that glints like the sea, wind speed at 10 m [m s-1]: (columns,) each
    view_cosine : (columns,) cosine of the view zenith angle at the surface
    emissivity : (channels, columns)
    tables : absorption table (P, T, slots, nodes) float32, its grid (ln first p, ln step, first T, step),
        wavenumber (nodes,), weight (nodes,), first node of each channel (channels + 1,)
    options : overlap (value of OVERLAPS), decorrelation length [m], number of subcolumns, 1 to scatter and 0 to
        absorb only
    quad, solar_quad : streams of the scattering solver and of its solar term, see `scattering.quadrature`
    results : (len(RESULTS), channels, columns), filled
    threads : worker threads; None = one for each processor
    """
    columns = valid.size
    threads = threads or os.cpu_count() or 1
    arguments = (
        valid, atmosphere, surface, reference, cloud, optics, sunlit, sun, view_cosine, emissivity, tables, options,
        quad, solar_quad, results
    )  # fmt: skip
    size = max(1, min(_BLOCK, -(-columns // threads)))
    starts = range(0, columns, size)
    if threads == 1 or len(starts) == 1:
        _solve_range(0, columns, *arguments)
        return
    with concurrent.futures.ThreadPoolExecutor(threads) as pool:
        pending = [pool.submit(_solve_range, start, min(start + size, columns), *arguments) for start in starts]
        try:
            for done in pending:
                done.result()
        except BaseException:
            pool.shutdown(wait=True, cancel_futures=True)
            raise
