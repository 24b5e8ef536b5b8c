"""Simulated annealing of moments on a periodic grid of cells, with fields that are kept up to date.

A move is judged from the field at one moment, at a cost that does not depend on their number; only an accepted move
costs a pass over all fields. That pass reads the table of couplings in order: its last but one axis holds the
differences of cells along z from −(n_z − 1) to n_z − 1, so that the row for any cell is one unbroken stretch.

Energies: E = ½ Σ s_p Q_pq s_q + Σ g_p s_p (+ penalty · |Σ w_p s_p|²); fields h_p = Σ_q Q_pq s_q hold p itself.
Every restart has a random sequence of its own, given by its seed, so results do not depend on the number of threads.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import kernel
from latticedip.kernels.patterns import lowest_on_sphere

#: With no more free signs than this a descent also tries to turn round every pair.
PAIRS_UP_TO = 200
#: Part of the moves that exchange two moments, where the net moment is held at zero.
EXCHANGES = 0.5


@kernel(inline=True)
def next_random(state):
    """A number in [0, 1): xorshift64* (Marsaglia 2003; Vigna, ACM Trans. Math. Softw. 42, 30 (2016))."""
    x = state[0]
    x ^= x >> np.uint64(12)
    x ^= x << np.uint64(25)
    x ^= x >> np.uint64(27)
    state[0] = x
    return np.float64((x * np.uint64(2685821657736338717)) >> np.uint64(11)) * 1.1102230246251565e-16


@kernel(inline=True)
def seed_random(seed, state):
    """Spread a seed over all bits (splitmix64) and leave out the first numbers."""
    x = seed + np.uint64(0x9E3779B97F4A7C15)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    x ^= x >> np.uint64(31)
    state[0] = x if x != np.uint64(0) else np.uint64(88172645463325252)
    for _ in range(8):
        next_random(state)


@kernel(fastmath=True, inline=True)
def add_field(table, m, nx, ny, nz, place, change, fields):
    """fields += change · Q[:, place] for one component of the coupling.

    table: flat, of shape (m, nx, ny, 2 nz − 1, m): source site, differences of cells, target site. fields (n_moments,).
    """
    cell = place // m
    z = cell % nz
    y = (cell // nz) % ny
    x = cell // (nz * ny)
    length = nz * m
    wide = (2 * nz - 1) * m
    begin = (place % m) * nx * ny * wide + (nz - 1 - z) * m
    for tx in range(nx):
        dx = tx - x if tx >= x else tx - x + nx
        for ty in range(ny):
            dy = ty - y if ty >= y else ty - y + ny
            here = begin + (dx * ny + dy) * wide
            there = (tx * ny + ty) * length
            # Slices, because an index that might be negative would keep the loop from being vectorised.
            row = table[here : here + length]
            out = fields[there : there + length]
            for i in range(length):
                out[i] += change * row[i]


@kernel(fastmath=True, inline=True)
def add_vector_field(tables, m, nx, ny, nz, place, change, fields):
    """fields (3, n_moments) += Q[:, place] change; tables (6, …) flat, in the order xx, yy, zz, yz, xz, xy."""
    t0, t1, t2, t3, t4, t5 = tables[0], tables[1], tables[2], tables[3], tables[4], tables[5]
    f0, f1, f2 = fields[0], fields[1], fields[2]
    a, b, c = change[0], change[1], change[2]
    cell = place // m
    z = cell % nz
    y = (cell // nz) % ny
    x = cell // (nz * ny)
    length = nz * m
    wide = (2 * nz - 1) * m
    begin = (place % m) * nx * ny * wide + (nz - 1 - z) * m
    for tx in range(nx):
        dx = tx - x if tx >= x else tx - x + nx
        for ty in range(ny):
            dy = ty - y if ty >= y else ty - y + ny
            here = begin + (dx * ny + dy) * wide
            end = here + length
            there = (tx * ny + ty) * length
            xx, yy, zz = t0[here:end], t1[here:end], t2[here:end]
            yz, xz, xy = t3[here:end], t4[here:end], t5[here:end]
            # One output per loop: with more, the checks for overlap keep it from being vectorised.
            out = f0[there : there + length]
            for i in range(length):
                out[i] += xx[i] * a + xy[i] * b + xz[i] * c
            out = f1[there : there + length]
            for i in range(length):
                out[i] += xy[i] * a + yy[i] * b + yz[i] * c
            out = f2[there : there + length]
            for i in range(length):
                out[i] += xz[i] * a + yz[i] * b + zz[i] * c


@kernel(inline=True)
def coupling_between(table, m, nx, ny, nz, target, source):
    """Q[target, source] of one component."""
    one, two = target // m, source // m
    dz = one % nz - two % nz + nz - 1
    dy = ((one // nz) % ny - (two // nz) % ny) % ny
    dx = (one // (nz * ny) - two // (nz * ny)) % nx
    return table[((((source % m) * nx + dx) * ny + dy) * (2 * nz - 1) + dz) * m + target % m]


@kernel(inline=True)
def penalty_change(penalty, net, weights, place, change):
    """Change of penalty · |net|² when a sign changes by ``change``."""
    total = 0.0
    for c in range(net.shape[0]):
        step = weights[c, place] * change
        total += step * (2.0 * net[c] + step)
    return penalty * total


@kernel()
def anneal_signs(
    first, last, table, m, nx, ny, nz, linear, free, start, weights, temperatures, penalties, exchange, seeds,
    out_signs, out_energies,
):  # fmt: skip
    """Anneal signs along given axes; restarts first..last.

    table: Q, flat, of shape (m, nx, ny, 2 nz − 1, m) with m sites in a cell. linear (n_moments,): g.
    free (n_free,): places of the signs that may change; start (n_moments,) int8: the fixed ones, 0 where free.
    weights (n_c, n_moments): net moment, c components, held at zero by penalties (n_sweeps,).
    exchange: whether pairs are exchanged too.
    out_signs (n_restarts, n_moments) int8; out_energies (n_restarts,), penalty left out.
    """
    n = start.shape[0]
    n_free = free.shape[0]
    state = np.empty(1, dtype=np.uint64)
    fields = np.empty(n)
    net = np.zeros(weights.shape[0])
    for restart in range(first, last):
        seed_random(seeds[restart], state)
        signs = out_signs[restart]
        for p in range(n):
            signs[p] = start[p]
        for i in range(n_free):
            signs[free[i]] = 1 if next_random(state) < 0.5 else -1
        sum_fields(table, m, nx, ny, nz, signs, fields)
        for c in range(net.shape[0]):
            net[c] = 0.0
            for p in range(n):
                net[c] += weights[c, p] * signs[p]
        for sweep in range(temperatures.shape[0]):
            temperature, penalty = temperatures[sweep], penalties[sweep]
            for _ in range(n_free):
                place = free[int(next_random(state) * n_free)]
                if exchange and next_random(state) < EXCHANGES:
                    other = free[int(next_random(state) * n_free)]
                    if signs[other] * signs[place] < 0:
                        exchange_signs(
                            place, other, table, m, nx, ny, nz, linear, weights, penalty, temperature, state, signs,
                            fields, net,
                        )  # fmt: skip
                    continue
                sign = signs[place]
                own = coupling_between(table, m, nx, ny, nz, place, place)
                change = -2.0 * sign * (fields[place] + linear[place]) + 2.0 * own
                change += penalty_change(penalty, net, weights, place, -2.0 * sign)
                if change <= 0.0 or (temperature > 0.0 and next_random(state) < np.exp(-change / temperature)):
                    for c in range(net.shape[0]):
                        net[c] -= 2.0 * sign * weights[c, place]
                    signs[place] = -sign
                    add_field(table, m, nx, ny, nz, place, -2.0 * sign, fields)
        # Descend until no single sign gains: the last sweeps at a low temperature may have left one.
        sum_fields(table, m, nx, ny, nz, signs, fields)
        penalty = penalties[penalties.shape[0] - 1]
        for _ in range(100):
            flips = 0
            for i in range(n_free):
                place = free[i]
                sign = signs[place]
                own = coupling_between(table, m, nx, ny, nz, place, place)
                change = -2.0 * sign * (fields[place] + linear[place]) + 2.0 * own
                change += penalty_change(penalty, net, weights, place, -2.0 * sign)
                if change < -1e-12:
                    for c in range(net.shape[0]):
                        net[c] -= 2.0 * sign * weights[c, place]
                    signs[place] = -sign
                    add_field(table, m, nx, ny, nz, place, -2.0 * sign, fields)
                    flips += 1
            if flips == 0:
                break
        sum_fields(table, m, nx, ny, nz, signs, fields)
        energy = 0.0
        for p in range(n):
            energy += signs[p] * (0.5 * fields[p] + linear[p])
        out_energies[restart] = energy


@kernel(inline=True)
def exchange_signs(
    place, other, table, m, nx, ny, nz, linear, weights, penalty, temperature, state, signs, fields, net
):  # fmt: skip
    """Try to turn round two opposite signs at once."""
    one, two = signs[place], signs[other]
    change = -2.0 * one * (fields[place] + linear[place]) - 2.0 * two * (fields[other] + linear[other])
    change += 2.0 * coupling_between(table, m, nx, ny, nz, place, place)
    change += 2.0 * coupling_between(table, m, nx, ny, nz, other, other)
    change += 4.0 * one * two * coupling_between(table, m, nx, ny, nz, place, other)
    extra = 0.0
    for c in range(net.shape[0]):
        step = -2.0 * (one * weights[c, place] + two * weights[c, other])
        extra += step * (2.0 * net[c] + step)
    change += penalty * extra
    if change <= 0.0 or (temperature > 0.0 and next_random(state) < np.exp(-change / temperature)):
        for c in range(net.shape[0]):
            net[c] -= 2.0 * (one * weights[c, place] + two * weights[c, other])
        signs[place] = -one
        signs[other] = -two
        add_field(table, m, nx, ny, nz, place, -2.0 * one, fields)
        add_field(table, m, nx, ny, nz, other, -2.0 * two, fields)


@kernel(inline=True)
def sum_fields(table, m, nx, ny, nz, signs, fields):
    """Fields of all signs afresh."""
    fields[:] = 0.0
    for p in range(signs.shape[0]):
        if signs[p] != 0:
            add_field(table, m, nx, ny, nz, p, np.float64(signs[p]), fields)


@kernel()
def descend_best_axis(tables, m, nx, ny, nz, free, weights, pull, signs):
    """Turn signs (and pairs of few) round while that lowers the energy along the pattern's own best axis.

    Changes ``signs`` and returns that energy.

    tables (6, …), flat as in `anneal_signs`: the form of the axis, xx, yy, zz, yz, xz, xy. weights (n_moments,): net
    moment along the axis. pull (3,): energy −(net moment) pull·u in the applied field.
    """
    n = signs.shape[0]
    fields = np.empty((6, n))
    form, trial, arm, values, vectors = np.empty(6), np.empty(6), np.empty(3), np.empty(3), np.empty((3, 3))
    energy = 0.0
    for _ in range(100):
        # Afresh in every round, so that no rounding builds up.
        net = 0.0
        for p in range(n):
            net += weights[p] * signs[p]
        for c in range(6):
            sum_fields(tables[c], m, nx, ny, nz, signs, fields[c])
            total = 0.0
            for p in range(n):
                total += signs[p] * fields[c, p]
            form[c] = 0.5 * total
        for i in range(3):
            arm[i] = net * pull[i]
        energy = lowest_on_sphere(form, arm, values, vectors)
        turned = 0
        for step in range(free.shape[0]):
            # The place itself stands for no second sign.
            for other_step in range(step, free.shape[0] if free.shape[0] <= PAIRS_UP_TO else step + 1):
                place, other = free[step], free[other_step]
                one, two = signs[place], signs[other]
                after = net - 2.0 * one * weights[place]
                if other != place:
                    after -= 2.0 * two * weights[other]
                for c in range(6):
                    change = -2.0 * one * fields[c, place]
                    change += 2.0 * coupling_between(tables[c], m, nx, ny, nz, place, place)
                    if other != place:
                        change -= 2.0 * two * fields[c, other]
                        change += 2.0 * coupling_between(tables[c], m, nx, ny, nz, other, other)
                        change += 4.0 * one * two * coupling_between(tables[c], m, nx, ny, nz, place, other)
                    trial[c] = form[c] + change
                for i in range(3):
                    arm[i] = after * pull[i]
                new = lowest_on_sphere(trial, arm, values, vectors)
                if new < energy - 1e-11 * (1.0 + abs(energy)):
                    turned += 1
                    energy, net = new, after
                    signs[place] = -one
                    if other != place:
                        signs[other] = -two
                    for c in range(6):
                        form[c] = trial[c]
                        add_field(tables[c], m, nx, ny, nz, place, -2.0 * one, fields[c])
                        if other != place:
                            add_field(tables[c], m, nx, ny, nz, other, -2.0 * two, fields[c])
        if turned == 0:
            break
    return energy


@kernel()
def anneal_vectors(
    first, last, tables, m, nx, ny, nz, linear, planes, weights, temperatures, penalties, seeds, out_vectors,
    out_energies,
):  # fmt: skip
    """Anneal unit vectors, free or each in a plane; restarts first..last.

    tables (6, …), flat as in `anneal_signs`: Q_ab in the order xx, yy, zz, yz, xz, xy. linear (n_moments, 3): g.
    planes (n_moments, 2, 3): two unit vectors of the plane of each, or (0, 2, 3) where moments are free.
    weights (n_moments,): net moment Σ w u held at zero by penalties (n_sweeps,).
    out_vectors (n_restarts, n_moments, 3); out_energies (n_restarts,), penalty left out.
    """
    n = linear.shape[0]
    flat = planes.shape[0] > 0
    state = np.empty(1, dtype=np.uint64)
    fields = np.empty((3, n))
    old, new, step, net = np.empty(3), np.empty(3), np.empty(3), np.empty(3)
    for restart in range(first, last):
        seed_random(seeds[restart], state)
        moments = out_vectors[restart]
        for p in range(n):
            draw_direction(p, flat, planes, 1e9, old, state, moments[p])
        sum_vector_fields(tables, m, nx, ny, nz, moments, fields)
        for a in range(3):
            net[a] = 0.0
            for p in range(n):
                net[a] += weights[p] * moments[p, a]
        reach = 1e9
        for sweep in range(temperatures.shape[0]):
            temperature, penalty = temperatures[sweep], penalties[sweep]
            accepted = 0
            for _ in range(n):
                place = int(next_random(state) * n)
                for a in range(3):
                    old[a] = moments[place, a]
                draw_direction(place, flat, planes, reach, old, state, new)
                for a in range(3):
                    step[a] = new[a] - old[a]
                change = 0.0
                for a in range(3):
                    change += step[a] * (fields[a, place] + linear[place, a])
                    w = weights[place] * step[a]
                    change += penalty * w * (2.0 * net[a] + w)
                q0 = coupling_between(tables[0], m, nx, ny, nz, place, place)
                q1 = coupling_between(tables[1], m, nx, ny, nz, place, place)
                q2 = coupling_between(tables[2], m, nx, ny, nz, place, place)
                q3 = coupling_between(tables[3], m, nx, ny, nz, place, place)
                q4 = coupling_between(tables[4], m, nx, ny, nz, place, place)
                q5 = coupling_between(tables[5], m, nx, ny, nz, place, place)
                change += 0.5 * (q0 * step[0] * step[0] + q1 * step[1] * step[1] + q2 * step[2] * step[2])
                change += q3 * step[1] * step[2] + q4 * step[0] * step[2] + q5 * step[0] * step[1]
                if change <= 0.0 or next_random(state) < np.exp(-change / temperature):
                    accepted += 1
                    for a in range(3):
                        moments[place, a] = new[a]
                        net[a] += weights[place] * step[a]
                    add_vector_field(tables, m, nx, ny, nz, place, step, fields)
            # Keep about half of the moves: short steps when it is cold.
            rate = accepted / n
            if rate < 0.4:
                reach *= 0.7
            elif rate > 0.6:
                reach *= 1.4
            reach = min(1e9 if rate > 0.9 else 3.0, max(1e-4, reach))
        sum_vector_fields(tables, m, nx, ny, nz, moments, fields)
        energy = 0.0
        for p in range(n):
            for a in range(3):
                energy += moments[p, a] * (0.5 * fields[a, p] + linear[p, a])
        out_energies[restart] = energy


@kernel(inline=True)
def draw_direction(place, flat, planes, reach, old, state, out):
    """A random unit vector within about ``reach`` (radians) of ``old``; anywhere where reach is large."""
    if flat:
        angle = 2.0 * np.pi * next_random(state)
        if reach < 4.0:
            one = two = 0.0
            for a in range(3):
                one += old[a] * planes[place, 0, a]
                two += old[a] * planes[place, 1, a]
            angle = np.arctan2(two, one) + reach * (2.0 * next_random(state) - 1.0)
        for a in range(3):
            out[a] = np.cos(angle) * planes[place, 0, a] + np.sin(angle) * planes[place, 1, a]
        return
    size = 0.0
    while size < 1e-12 or size > 1.0:
        size = 0.0
        for a in range(3):
            out[a] = 2.0 * next_random(state) - 1.0
            size += out[a] * out[a]
    size = np.sqrt(size)
    if reach >= 4.0:
        for a in range(3):
            out[a] /= size
        return
    total = 0.0
    for a in range(3):
        out[a] = old[a] + reach * out[a]
        total += out[a] * out[a]
    total = np.sqrt(total)
    for a in range(3):
        out[a] /= total


@kernel(inline=True)
def sum_vector_fields(tables, m, nx, ny, nz, moments, fields):
    """Fields of all unit vectors afresh."""
    fields[:] = 0.0
    for p in range(moments.shape[0]):
        add_vector_field(tables, m, nx, ny, nz, p, moments[p], fields)
