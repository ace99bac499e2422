"""Transfer surfaces: look-up of a half's two currents with their slopes.

A surface is an array (H, U, 4) of i_out, di_out/du, i_drive, di_drive/du on a grid that is
fine where devices turn on and saturate, coarse elsewhere. Cubic Hermite in u, linear in h:
continuous everywhere, and monotone in u where the data are (slopes limited when it is built).
"""

from typing import NamedTuple

from tonesim.kernel.jit import kernel


class Grid(NamedTuple):
    """Grid of both halves' surfaces: three zones in u, two in h; all steps powers of two."""

    u_low: float  # lowest u, volt
    u_fine: float  # the fine zone starts here
    u_coarse: float  # and ends here
    n_low: int  # cells below the fine zone
    n_fine: int
    n_high: int  # cells above it
    du_fine: float
    du_coarse: float
    h_low: float  # lowest h, volt
    h_coarse: float  # the fine zone ends here
    n_h_fine: int
    n_h_coarse: int
    dh_fine: float
    dh_coarse: float
    per_du_fine: float  # reciprocals, exact because the steps are powers of two
    per_du_coarse: float
    per_dh_fine: float
    per_dh_coarse: float


@kernel
def look_up(table, g, u, h):
    """Currents of a half with their slopes at drive u and headroom h.

    Outside the grid the currents go on as straight lines.

    Returns
    -------
    i_out, di_out/du, di_out/dh, i_drive, di_drive/du, di_drive/dh : float
    """
    if u < g.u_fine:
        wide, per_u = g.du_coarse, g.per_du_coarse
        y = (u - g.u_low) * per_u
        iu = int(y) if y > 0.0 else 0
        first = 0
    elif u < g.u_coarse:
        wide, per_u = g.du_fine, g.per_du_fine
        y = (u - g.u_fine) * per_u
        iu = int(y)
        first = g.n_low
    else:
        wide, per_u = g.du_coarse, g.per_du_coarse
        y = (u - g.u_coarse) * per_u
        iu = int(y) if y < g.n_high else g.n_high - 1
        first = g.n_low + g.n_fine
    t = y - iu
    over = 0.0
    if t < 0.0:
        over = t
        t = 0.0
    elif t > 1.0:
        over = t - 1.0
        t = 1.0
    iu += first
    if h < g.h_coarse:
        per_h = g.per_dh_fine
        y = (h - g.h_low) * per_h
        ih = int(y) if y > 0.0 else 0
    else:
        per_h = g.per_dh_coarse
        y = (h - g.h_coarse) * per_h
        ih = int(y) if y < g.n_h_coarse else g.n_h_coarse - 1
        y += g.n_h_fine
        ih += g.n_h_fine
    fh = y - ih
    t2 = t * t
    s = 1.0 - t
    a = t2 * (3.0 - 2.0 * t)
    b0 = t * s * s * wide
    b1 = -t2 * s * wide
    da = 6.0 * (t - t2) * per_u
    db0 = s * (1.0 - 3.0 * t)
    db1 = t * (3.0 * t - 2.0)
    ju = iu + 1
    jh = ih + 1
    over *= wide

    d = table[ih, ju, 0] - table[ih, iu, 0]
    lo_o = table[ih, iu, 0] + a * d + b0 * table[ih, iu, 1] + b1 * table[ih, ju, 1]
    lo_ou = da * d + db0 * table[ih, iu, 1] + db1 * table[ih, ju, 1]
    d = table[ih, ju, 2] - table[ih, iu, 2]
    lo_d = table[ih, iu, 2] + a * d + b0 * table[ih, iu, 3] + b1 * table[ih, ju, 3]
    lo_du = da * d + db0 * table[ih, iu, 3] + db1 * table[ih, ju, 3]
    d = table[jh, ju, 0] - table[jh, iu, 0]
    hi_o = table[jh, iu, 0] + a * d + b0 * table[jh, iu, 1] + b1 * table[jh, ju, 1]
    hi_ou = da * d + db0 * table[jh, iu, 1] + db1 * table[jh, ju, 1]
    d = table[jh, ju, 2] - table[jh, iu, 2]
    hi_d = table[jh, iu, 2] + a * d + b0 * table[jh, iu, 3] + b1 * table[jh, ju, 3]
    hi_du = da * d + db0 * table[jh, iu, 3] + db1 * table[jh, ju, 3]

    if over != 0.0:
        lo_o += over * lo_ou
        lo_d += over * lo_du
        hi_o += over * hi_ou
        hi_d += over * hi_du
    d_o = hi_o - lo_o
    d_d = hi_d - lo_d
    return (
        lo_o + fh * d_o,
        lo_ou + fh * (hi_ou - lo_ou),
        d_o * per_h,
        lo_d + fh * d_d,
        lo_du + fh * (hi_du - lo_du),
        d_d * per_h,
    )


@kernel
def limit_slopes(table, us):
    """Limit every stored slope so that the cubic between two nodes stays monotone.

    Fritsch and Carlson, SIAM J. Numer. Anal. 17(2), 1980: a slope within three times the
    smaller neighbouring secant, and zero where the secants disagree in sign.
    """
    for ih in range(table.shape[0]):
        for c in range(0, 4, 2):
            for iu in range(us.size):
                slope = table[ih, iu, c + 1]
                for side in range(2):
                    lo = iu - 1 + side
                    if lo < 0 or lo + 1 >= us.size:
                        continue
                    secant = (table[ih, lo + 1, c] - table[ih, lo, c]) / (us[lo + 1] - us[lo])
                    bound = 3.0 * secant
                    if secant >= 0.0:
                        slope = min(max(slope, 0.0), bound)
                    else:
                        slope = max(min(slope, 0.0), bound)
                table[ih, iu, c + 1] = slope
