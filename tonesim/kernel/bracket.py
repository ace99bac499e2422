"""Where to cut a bracket next: Chandrupatla's choice between interpolation and bisection.

T. R. Chandrupatla, Advances in Engineering Software 28(3), 1997. A root that a sign change
encloses stays enclosed, so the search cannot fail; smooth functions need about ten cuts.

A search keeps x1 (the newest point), x2 (on the other side of the root) and x3 (the one
before), with their values.
"""

from tonesim.kernel.jit import kernel

MOST_CUTS = 200
TIGHT = 1e-13  # width of a bracket that is small enough [V]


@kernel
def next_share(x1, x2, x3, f1, f2, f3):
    """Share of the way from x1 to x2 at which to look next, and whether the bracket is tight."""
    width = abs(x2 - x1)
    best = x1 if abs(f1) < abs(f2) else x2
    least = (TIGHT + 4e-16 * abs(best)) / width if width > 0.0 else 1.0
    if least > 0.5 or f1 == 0.0 or f2 == 0.0:
        return 0.5, True
    t = 0.5
    if f3 != f2 and x3 != x2:
        xi = (x1 - x2) / (x3 - x2)
        phi = (f1 - f2) / (f3 - f2)
        if phi * phi < xi and (1.0 - phi) * (1.0 - phi) < 1.0 - xi:
            t = f1 / (f2 - f1) * f3 / (f2 - f3)
            t += (x3 - x1) / (x2 - x1) * f1 / (f3 - f1) * f2 / (f3 - f2)
    return min(max(t, least), 1.0 - least), False


@kernel
def narrow(x, f, x1, x2, f1, f2):
    """The bracket after a look at x: x1, x2, x3 and their values."""
    if (f > 0.0) == (f1 > 0.0):
        return x, x2, x1, f, f2, f1
    return x, x1, x2, f, f1, f2
