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
def wrap(field):  # type: ignore[no-untyped-def]
    """Copy the end columns of every row into its ghost cells."""
    last = field.shape[1] - 2
    for r in range(field.shape[0]):
        field[r, 0] = field[r, last]
        field[r, last + 1] = field[r, 1]


@njit(**_FAST)
def potentials(p, n, par, off_rows, off_weights, e_p, e_n, slow, w_pn, w_ps, w_ns, buf):  # type: ignore[no-untyped-def]
    """Cell values needed by the fluxes.

    ``e_p``, ``e_n``: exchange potentials without their ideal part (interaction and gradient energy) of polymer and
    non-solvent against solvent. ``slow``: square root of the arrest factor. ``w_ab``: fourth root of the exchange mobility
    of the pair, so that the product over the two cells of a link is the root of the link's mobility.
    """
    rows, columns = p.shape[0], p.shape[1] - 2
    x_sn, x_pn, x_ps = par[0], par[1], par[2]
    k_p, k_n = par[6], par[7]
    m_p, g_frac, g_width, floor = par[8], par[9], par[10], par[11]
    one, zero = par.dtype.type(1), par.dtype.type(0)
    tiny, top, shrink, half = par[12], par[13], par[14], par[15]
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
            # logistic fall: exp(y) by six squarings of its second-order start at y/64 (within 1 % for |y| < 14)
            y = (vp - g_frac) * g_width
            y = min(max(y, -top), top) * shrink
            x = one + y * (one + half * y)
            x *= x
            x *= x
            x *= x
            x *= x
            x *= x
            x *= x
            arrest = floor + (one - floor) / (one + x)
            slow[r, j] = np.sqrt(arrest)
            vp = max(vp, tiny)
            vn = max(vn, tiny)
            vs = max(vs, tiny)
            w_pn[r, j] = np.sqrt(np.sqrt(m_p * arrest * vp * vn))
            w_ps[r, j] = np.sqrt(np.sqrt(m_p * arrest * vp * vs))
            w_ns[r, j] = np.sqrt(np.sqrt(vn * vs))
    for a in (e_p, e_n, slow, w_pn, w_ps, w_ns):
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
    m_p,
    one,
    weight,
    f_p,
    f_n,
):  # type: ignore[no-untyped-def]
    for j in range(f_p.size):
        s0, s1 = one - p0[j] - n0[j], one - p1[j] - n1[j]
        dp, dn, ds = (p1[j] - p0[j]) * i_p, (n1[j] - n0[j]) * i_n, (s1 - s0) * i_s
        tp, tn, ts = p0[j] + p1[j], n0[j] + n1[j], s0 + s1
        de_p, de_n = ep1[j] - ep0[j], en1[j] - en0[j]
        a = m_p * a0[j] * a1[j]
        v_pn, v_ps, v_ns = x0[j] * x1[j], y0[j] * y1[j], z0[j] * z1[j]
        g_pn = a * (tn * dp - tp * dn) + v_pn * (v_pn * (de_p - de_n) - r_x[j])
        g_ps = a * (ts * dp - tp * ds) + v_ps * (v_ps * de_p - r_y[j])
        g_ns = ts * dn - tn * ds + v_ns * (v_ns * de_n - r_z[j])
        f_p[j] = weight * (g_pn + g_ps)
        f_n[j] = weight * (g_ns - g_pn)


@njit(**_FAST)
def rates(p, n, e_p, e_n, slow, w_pn, w_ps, w_ns, par, links, shifts, weights, noise, key0, key1, out_p, out_n, buf):  # type: ignore[no-untyped-def]
    """Divergence of the fluxes (deterministic and thermal) over all links; every link is visited once.

    ``links[l, r]``: the row that row r meets over link l; ``shifts[l]``: its shift in columns; ``weights[l]``: weight of the link.
    ``noise`` is sqrt(2·strength/dt); 0 leaves the random numbers out.
    """
    rows, columns = p.shape[0], p.shape[1] - 2
    half = par[15]
    i_p, i_s, i_n = par[3] * half, par[4] * half, par[5] * half
    m_p = par[8]
    one, zero = par.dtype.type(1), par.dtype.type(0)
    middle, unit = par[16], par[17]
    c1, c2, c3 = np.uint32(0x9E3779B9), np.uint32(0x85EBCA6B), np.uint32(0xC2B2AE35)
    mask = np.uint32(1023)
    for r in range(rows):
        for j in range(columns + 2):
            out_p[r, j] = zero
            out_n[r, j] = zero
    for r in range(rows):
        for k in range(links.shape[0]):
            q, s, weight = links[k, r], shifts[k], weights[k]
            amp = noise / np.sqrt(weight) * unit
            base = np.uint32((r * links.shape[0] + k) * columns)
            if noise > zero:
                for j in range(1, columns + 1):
                    h = np.uint32(np.uint32(np.uint32(base + np.uint32(j)) * c1) ^ key0)
                    h = np.uint32(np.uint32(h ^ np.uint32(h >> np.uint32(16))) * c2)
                    h = np.uint32(h + key1)
                    h = np.uint32(np.uint32(h ^ np.uint32(h >> np.uint32(13))) * c3)
                    h = np.uint32(h ^ np.uint32(h >> np.uint32(16)))
                    buf[2, j] = amp * (np.float32(np.int32(h & mask)) - middle)
                    buf[3, j] = amp * (np.float32(np.int32(np.uint32(h >> np.uint32(10)) & mask)) - middle)
                    buf[4, j] = amp * (np.float32(np.int32(np.uint32(h >> np.uint32(20)) & mask)) - middle)
            else:
                for j in range(1, columns + 1):
                    buf[2, j] = zero
                    buf[3, j] = zero
                    buf[4, j] = zero
            lo, hi = 1 + s, columns + 1 + s
            _link(
                p[r, 1:-1],
                p[q, lo:hi],
                n[r, 1:-1],
                n[q, lo:hi],
                e_p[r, 1:-1],
                e_p[q, lo:hi],
                e_n[r, 1:-1],
                e_n[q, lo:hi],
                slow[r, 1:-1],
                slow[q, lo:hi],
                w_pn[r, 1:-1],
                w_pn[q, lo:hi],
                w_ps[r, 1:-1],
                w_ps[q, lo:hi],
                w_ns[r, 1:-1],
                w_ns[q, lo:hi],
                buf[2, 1:-1],
                buf[3, 1:-1],
                buf[4, 1:-1],
                i_p,
                i_s,
                i_n,
                m_p,
                one,
                weight,
                buf[0, 1:-1],
                buf[1, 1:-1],
            )
            to_p, to_n = out_p[q, lo:hi], out_n[q, lo:hi]
            for j in range(columns):
                out_p[r, j + 1] += buf[0, j + 1]
                out_n[r, j + 1] += buf[1, j + 1]
            for j in range(columns):
                to_p[j] -= buf[0, j + 1]
                to_n[j] -= buf[1, j + 1]
    for r in range(rows):
        out_p[r, 1] += out_p[r, columns + 1]
        out_p[r, columns] += out_p[r, 0]
        out_n[r, 1] += out_n[r, columns + 1]
        out_n[r, columns] += out_n[r, 0]


@njit(**_FAST)
def advance(field, change):  # type: ignore[no-untyped-def]
    """Add ``change`` (rows, columns) to the inner cells and renew the ghosts."""
    rows, columns = change.shape
    for r in range(rows):
        for j in range(columns):
            field[r, j + 1] += change[r, j]
        field[r, 0] = field[r, columns]
        field[r, columns + 1] = field[r, 1]


@njit(**_FAST)
def largest(change):  # type: ignore[no-untyped-def]
    """Largest magnitude in ``change`` (rows, columns); NaN or infinite where any cell is."""
    top = change.dtype.type(0)
    total = change.dtype.type(0)
    for r in range(change.shape[0]):
        for j in range(change.shape[1]):
            d = abs(change[r, j])
            top = max(top, d)
            total += d * change.dtype.type(0)
    return top + total
