# mypy: disallow-untyped-defs=False, disallow-incomplete-defs=False, check-untyped-defs=False
# numba infers the types of compiled functions; annotations would say less than the docstrings.
"""Compiled loops of the particle solver; the formulas stand in docs/simulation.md.

Fields are stored as rows along the last axis, each with one ghost cell at either end: shape (rows, columns + 2), in 2-D
and 3-D alike. Tables made by ``lattice`` say which row is whose neighbour, so that one set of loops serves both. All
loops over columns are plain strided loops that the compiler vectorises; there are no logarithms (docs/simulation.md says
why the ideal part of the fluxes needs none).
"""

from __future__ import annotations

import numpy as np
from numba import njit

# Reassociation and fused multiply-add change the last bits only; NaN and infinity stay visible (no nnan, ninf).
_FLAGS = {"nsz", "arcp", "contract", "afn"}
_FAST = {"cache": True, "fastmath": _FLAGS, "error_model": "numpy", "nogil": True}


@njit(**_FAST)
def wrap(field):
    """Copy the end columns of every row into its ghost cells."""
    last = field.shape[1] - 2
    for r in range(field.shape[0]):
        field[r, 0] = field[r, last]
        field[r, last + 1] = field[r, 1]


@njit(**_FAST)
def potentials(p, n, par, off_rows, off_weights, cells, buf):
    """Cell values needed by the fluxes, into ``cells``: exchange potentials without their ideal part (interaction and
    gradient energy) of polymer and of non-solvent against solvent; square root of the arrest factor times the polymer's
    mobility; the three fractions, at least ``tiny`` (the caller takes their logarithms, which numpy has vectorised).
    """
    e_p, e_n, slow, c_p, c_n, c_s = cells
    rows, columns = p.shape[0], p.shape[1] - 2
    x_sn, x_pn, x_ps = par[0], par[1], par[2]
    k_p, k_n = par[6], par[7]
    m_p, g_frac, g_width, floor = par[8], par[9], par[10], par[11]
    one, zero = par.dtype.type(1), par.dtype.type(0)
    top, shrink, half, tiny = par[12], par[13], par[14], par[17]
    for r in range(rows):
        for j in range(1, columns + 1):
            buf[0, j] = zero
            buf[1, j] = zero
        for o in range(off_rows.shape[0]):
            q = off_rows[o, r]
            c0, c1 = off_weights[o, 0], off_weights[o, 1]
            for j in range(1, columns + 1):
                buf[0, j] += c0 * p[q, j] + c1 * (p[q, j - 1] + p[q, j + 1])
                buf[1, j] += c0 * n[q, j] + c1 * (n[q, j - 1] + n[q, j + 1])
        for j in range(1, columns + 1):
            vp, vn = p[r, j], n[r, j]
            vs = one - vp - vn
            e_s = x_ps * vp + x_sn * vn
            e_p[r, j] = x_pn * vn + x_ps * vs - k_p * buf[0, j] - e_s
            e_n[r, j] = x_pn * vp + x_sn * vs - k_n * buf[1, j] - e_s
            # logistic fall: exp(y) by six squarings of its second-order start at y/64 (within 12 % at |y| = 14, 1 % at 6)
            y = (vp - g_frac) * g_width
            y = min(max(y, -top), top) * shrink
            x = one + y * (one + half * y)
            x *= x
            x *= x
            x *= x
            x *= x
            x *= x
            x *= x
            slow[r, j] = np.sqrt(m_p * (floor + (one - floor) / (one + x)))
            c_p[r, j] = max(vp, tiny)
            c_n[r, j] = max(vn, tiny)
            c_s[r, j] = max(vs, tiny)
    for a in cells:
        for r in range(rows):
            a[r, 0] = a[r, columns]
            a[r, columns + 1] = a[r, 1]


@njit(**_FAST)
def _link(
    p0,
    p1,
    n0,
    n1,
    ep0,
    ep1,
    en0,
    en1,
    a0,
    a1,
    x0,
    x1,
    y0,
    y1,
    z0,
    z1,
    r_x,
    r_y,
    r_z,
    i_p,
    i_s,
    i_n,
    weight,
    c,
    f_p,
    f_n,
):
    """Flux of polymer and non-solvent over one kind of link for one row: the formulas are in docs/simulation.md.

    The mean fraction of a link is the logarithmic mean (φ' − φ)/(ln φ' − ln φ), by its series where the two are near. With it
    mean × difference of logarithms is the difference of fractions: the ideal part of the flux needs no logarithm, cannot
    blow up where a component is absent, and yet the whole is mobility × difference of potentials, so that energy falls.
    """
    one, half, tiny, near, c_1, c_2, c_3 = c
    for j in range(f_p.size):
        s0, s1 = one - p0[j] - n0[j], one - p1[j] - n1[j]
        dp, dn, ds = (p1[j] - p0[j]) * i_p, (n1[j] - n0[j]) * i_n, (s1 - s0) * i_s
        u, v, d = max(p0[j], tiny), max(p1[j], tiny), x1[j] - x0[j]
        w = d * d
        l_p = (v - u) / d if w > near else half * (u + v) * (one - w * (c_1 - w * (c_2 - w * c_3)))
        u, v, d = max(n0[j], tiny), max(n1[j], tiny), y1[j] - y0[j]
        w = d * d
        l_n = (v - u) / d if w > near else half * (u + v) * (one - w * (c_1 - w * (c_2 - w * c_3)))
        u, v, d = max(s0, tiny), max(s1, tiny), z1[j] - z0[j]
        w = d * d
        l_s = (v - u) / d if w > near else half * (u + v) * (one - w * (c_1 - w * (c_2 - w * c_3)))
        de_p, de_n = ep1[j] - ep0[j], en1[j] - en0[j]
        a = a0[j] * a1[j]
        m_pn, m_ps, m_ns = l_p * l_n, l_p * l_s, l_n * l_s
        g_pn = a * (l_n * dp - l_p * dn + m_pn * (de_p - de_n)) - np.sqrt(a * m_pn) * r_x[j]
        g_ps = a * (l_s * dp - l_p * ds + m_ps * de_p) - np.sqrt(a * m_ps) * r_y[j]
        g_ns = l_s * dn - l_n * ds + m_ns * de_n - np.sqrt(m_ns) * r_z[j]
        f_p[j] = weight * (g_pn + g_ps)
        f_n[j] = weight * (g_ns - g_pn)


@njit(**_FAST)
def _link_still(p0, p1, n0, n1, ep0, ep1, en0, en1, a0, a1, x0, x1, y0, y1, z0, z1, i_p, i_s, i_n, weight, c, f_p, f_n):
    """The same without thermal flux."""
    one, half, tiny, near, c_1, c_2, c_3 = c
    for j in range(f_p.size):
        s0, s1 = one - p0[j] - n0[j], one - p1[j] - n1[j]
        dp, dn, ds = (p1[j] - p0[j]) * i_p, (n1[j] - n0[j]) * i_n, (s1 - s0) * i_s
        u, v, d = max(p0[j], tiny), max(p1[j], tiny), x1[j] - x0[j]
        w = d * d
        l_p = (v - u) / d if w > near else half * (u + v) * (one - w * (c_1 - w * (c_2 - w * c_3)))
        u, v, d = max(n0[j], tiny), max(n1[j], tiny), y1[j] - y0[j]
        w = d * d
        l_n = (v - u) / d if w > near else half * (u + v) * (one - w * (c_1 - w * (c_2 - w * c_3)))
        u, v, d = max(s0, tiny), max(s1, tiny), z1[j] - z0[j]
        w = d * d
        l_s = (v - u) / d if w > near else half * (u + v) * (one - w * (c_1 - w * (c_2 - w * c_3)))
        de_p, de_n = ep1[j] - ep0[j], en1[j] - en0[j]
        a = a0[j] * a1[j]
        g_pn = a * (l_n * dp - l_p * dn + l_p * l_n * (de_p - de_n))
        g_ps = a * (l_s * dp - l_p * ds + l_p * l_s * de_p)
        g_ns = l_s * dn - l_n * ds + l_n * l_s * de_n
        f_p[j] = weight * (g_pn + g_ps)
        f_n[j] = weight * (g_ns - g_pn)


@njit(**_FAST)
def _random(base, key0, key1, amp, middle, x, y, z):
    """Three uniform numbers of standard deviation ``amp``·(1/unit) from one hashed counter for each column."""
    c1, c2, c3 = np.uint32(0x9E3779B9), np.uint32(0x85EBCA6B), np.uint32(0xC2B2AE35)
    mask = np.uint32(1023)
    for j in range(x.size):
        h = np.uint32(np.uint32(np.uint32(base + np.uint32(j)) * c1) ^ key0)
        h = np.uint32(np.uint32(h ^ np.uint32(h >> np.uint32(16))) * c2)
        h = np.uint32(h + key1)
        h = np.uint32(np.uint32(h ^ np.uint32(h >> np.uint32(13))) * c3)
        h = np.uint32(h ^ np.uint32(h >> np.uint32(16)))
        x[j] = amp * (np.float32(np.int32(h & mask)) - middle)
        y[j] = amp * (np.float32(np.int32(np.uint32(h >> np.uint32(10)) & mask)) - middle)
        z[j] = amp * (np.float32(np.int32(np.uint32(h >> np.uint32(20)) & mask)) - middle)


@njit(**_FAST)
def rates(p, n, cells, par, links, shifts, weights, noise, key0, key1, block, out_p, out_n, buf):
    """Divergence of the fluxes (deterministic and thermal) over all links; every link is visited once.

    ``links[l, r]``: the row that row r meets over link l; ``shifts[l]``: its shift in columns; ``weights[l]``: weight of the link.
    ``noise`` is sqrt(2·strength/dt); 0 leaves the random numbers out. ``block`` rows, which must divide the rows of a plane, are
    taken together: as far as they and those they meet follow each other they are one vector, whose ghost cells carry no flux.
    """
    e_p, e_n, slow, q_p, q_n, q_s = [a.reshape(-1) for a in cells]
    p_, n_, o_p, o_n = p.reshape(-1), n.reshape(-1), out_p.reshape(-1), out_n.reshape(-1)
    rows, columns = p.shape[0], p.shape[1] - 2
    width = columns + 2
    i_p, i_s, i_n = par[3], par[4], par[5]
    one, zero = par.dtype.type(1), par.dtype.type(0)
    c = (one, par[14], par[17], par[18], par[19], par[20], par[21])
    middle, unit = par[15], par[16]
    o_p[:] = zero
    o_n[:] = zero
    for first in range(0, rows, block):
        for k in range(links.shape[0]):
            s, weight = shifts[k], weights[k]
            r = first
            while r < first + block:
                q, end = links[k, r], r + 1
                while end < first + block and links[k, end] == q + end - r:
                    end += 1
                size = (end - r) * width - 2
                h, t = r * width + 1, q * width + 1 + s
                hh, tt = h + size, t + size
                f_p, f_n = buf[0, :size], buf[1, :size]
                if noise > zero:
                    x, y, z = buf[2, :size], buf[3, :size], buf[4, :size]
                    amp = noise / np.sqrt(weight) * unit
                    for i in range(r, end):
                        base, at = np.uint32((i * links.shape[0] + k) * columns), (i - r) * width
                        past = at + columns
                        _random(base, key0, key1, amp, middle, x[at:past], y[at:past], z[at:past])
                    _link(
                        p_[h:hh], p_[t:tt], n_[h:hh], n_[t:tt], e_p[h:hh], e_p[t:tt], e_n[h:hh], e_n[t:tt], slow[h:hh],
                        slow[t:tt], q_p[h:hh], q_p[t:tt], q_n[h:hh], q_n[t:tt], q_s[h:hh], q_s[t:tt], x, y, z, i_p, i_s,
                        i_n, weight, c, f_p, f_n,
                    )  # fmt: skip
                else:
                    _link_still(
                        p_[h:hh], p_[t:tt], n_[h:hh], n_[t:tt], e_p[h:hh], e_p[t:tt], e_n[h:hh], e_n[t:tt], slow[h:hh],
                        slow[t:tt], q_p[h:hh], q_p[t:tt], q_n[h:hh], q_n[t:tt], q_s[h:hh], q_s[t:tt], i_p, i_s, i_n, weight,
                        c, f_p, f_n,
                    )  # fmt: skip
                for g in range(columns, size, width):
                    f_p[g], f_p[g + 1], f_n[g], f_n[g + 1] = zero, zero, zero, zero
                _add(o_p[h:hh], o_n[h:hh], f_p, f_n)
                _subtract(o_p[t:tt], o_n[t:tt], f_p, f_n)
                r = end
    for out in (out_p, out_n):
        for r in range(rows):
            out[r, 1] += out[r, columns + 1]
            out[r, columns] += out[r, 0]


@njit(**_FAST)
def _add(to_p, to_n, f_p, f_n):
    for j in range(f_p.size):
        to_p[j] += f_p[j]
        to_n[j] += f_n[j]


@njit(**_FAST)
def _subtract(to_p, to_n, f_p, f_n):
    for j in range(f_p.size):
        to_p[j] -= f_p[j]
        to_n[j] -= f_n[j]


@njit(**_FAST)
def advance(field, change):
    """Add ``change`` (rows, columns) to the inner cells and renew the ghosts."""
    rows, columns = change.shape
    for r in range(rows):
        for j in range(columns):
            field[r, j + 1] += change[r, j]
        field[r, 0] = field[r, columns]
        field[r, columns + 1] = field[r, 1]
