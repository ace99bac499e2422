"""The sample loop with probes on its nodes, and the same loop while its rails come up."""

from tonesim.kernel.amplifier import (
    D1,
    MAINS_SIN,
    O1,
    RAIL_N,
    RAIL_P,
    X1,
    advance,
)
from tonesim.kernel.driver import output_current
from tonesim.kernel.jit import kernel
from tonesim.kernel.surface import look_up

# Columns of a trace: volts, then amperes.
OUTPUT, DRIVE, DRIVER, POSITIVE, NEGATIVE, UPPER, LOWER, AMP = 0, 1, 2, 3, 4, 5, 6, 7
COLUMNS = 8


@kernel
def _note(row, v_p, v_n, state, p):
    """Fill a row of a trace after a step with rails v_p, v_n."""
    v_o, v_d, v_x = state[O1], state[D1], state[X1]
    row[OUTPUT], row[DRIVE], row[DRIVER] = v_o, v_d, v_x
    row[POSITIVE], row[NEGATIVE] = v_p, v_n
    row[UPPER] = look_up(p.upper, p.grid, v_d - v_o, v_p - v_o)[0]
    row[LOWER] = look_up(p.lower, p.grid, v_o - v_d, v_o + v_n)[0]
    row[AMP] = output_current(v_x - v_d, p.driver)[0]


@kernel
def traced(x, out, state, evidence, p):
    """Run the stage over x (N,); fill out (N, COLUMNS), a row a step."""
    for n in range(x.size):
        v_p, v_n = state[RAIL_P], state[RAIL_N]
        advance(x[n : n + 1], out[n, :1], state, evidence, p)
        _note(out[n], v_p, v_n, state, p)


@kernel
def powered(source, x, out, state, evidence, dead, alive, least_supply):
    """Run the stage over x (N,) while its rails come up; fill out (N, COLUMNS).

    `source` (N,) is what both rails' sources give, as a share of their open voltage; `dead` and
    `alive` are the parameters with the op-amp out of work and at work, which it is from
    `least_supply` volts between the rails.
    """
    for n in range(x.size):
        v_p, v_n = state[RAIL_P], state[RAIL_N]
        state[MAINS_SIN] = source[n]
        if v_p + v_n < least_supply:
            advance(x[n : n + 1], out[n, :1], state, evidence, dead)
            _note(out[n], v_p, v_n, state, dead)
        else:
            advance(x[n : n + 1], out[n, :1], state, evidence, alive)
            _note(out[n], v_p, v_n, state, alive)
