"""Finite impulse response filters over signals that arrive in blocks.

A *line* is one array: first the past a filter still needs, then the new samples. The caller writes
the new samples behind the past, and the filter moves the past forward when it is done.

Every output sample is summed in the same order wherever a block begins or ends, so any cut of the
signal gives equal bits. The sum runs over the taps outside and over the samples inside: without
fast-maths a compiler may not reorder a sum and therefore does not vectorise a dot product, but it
does vectorise this, 0.04 ns per tap and sample against 0.5 ns (one core with 512-bit registers).
"""

from tonesim.kernel.jit import kernel

CHUNK = 512  # samples summed at a time: partial sums and their inputs stay in the nearest cache


@kernel
def convolve(line, count, taps, out):
    """Write ``out[n] = sum_k taps[k] * x[n - k]`` for n < count.

    `line` holds ``len(taps) - 1`` past samples and then x. Cost: a multiply-add per tap and sample.
    """
    order = taps.shape[0] - 1
    grouped = taps.shape[0] - taps.shape[0] % 8
    for start in range(0, count, CHUNK):
        size = min(CHUNK, count - start)
        y = out[start : start + size]
        for n in range(size):
            y[n] = 0.0
        for k in range(0, grouped, 8):
            _add_eight_taps(line, start + order - k, taps, k, y)
        for k in range(grouped, taps.shape[0]):
            tap = taps[k]
            x = line[start + order - k : start + order - k + size]
            for n in range(size):
                y[n] += tap * x[n]


@kernel
def _add_eight_taps(line, first, taps, k, y):
    """Add eight taps in one pass: one load and store of the partial sum instead of eight."""
    size = y.shape[0]
    h0, h1, h2, h3 = taps[k], taps[k + 1], taps[k + 2], taps[k + 3]
    h4, h5, h6, h7 = taps[k + 4], taps[k + 5], taps[k + 6], taps[k + 7]
    x0 = line[first : first + size]
    x1 = line[first - 1 : first - 1 + size]
    x2 = line[first - 2 : first - 2 + size]
    x3 = line[first - 3 : first - 3 + size]
    x4 = line[first - 4 : first - 4 + size]
    x5 = line[first - 5 : first - 5 + size]
    x6 = line[first - 6 : first - 6 + size]
    x7 = line[first - 7 : first - 7 + size]
    for n in range(size):
        four = (((y[n] + h0 * x0[n]) + h1 * x1[n]) + h2 * x2[n]) + h3 * x3[n]
        y[n] = (((four + h4 * x4[n]) + h5 * x5[n]) + h6 * x6[n]) + h7 * x7[n]


@kernel
def keep_past(line, past, count):
    """Move the last `past` of the ``past + count`` samples in use to the front of the line."""
    for n in range(past):
        line[n] = line[n + count]


@kernel
def filter_block(line, count, taps, out):
    """Filter `count` new samples and keep the past."""
    convolve(line, count, taps, out)
    keep_past(line, taps.shape[0] - 1, count)


@kernel
def interpolate_by_two(line, count, branch, scratch, out):
    """Double the rate of `count` new samples by a half-band filter of ``2 * len(branch) - 1`` taps.

    Every second tap of a half-band filter is zero except the middle one. `branch` holds the others,
    scaled to the sum 1: even outputs are their sum over the input, odd outputs are input samples.
    The middle tap sits ``len(branch) - 1`` output samples behind the newest one.
    """
    past = branch.shape[0] - 1
    middle = branch.shape[0] // 2
    convolve(line, count, branch, scratch)
    for n in range(count):
        out[2 * n] = scratch[n]
        out[2 * n + 1] = line[n + middle]
    keep_past(line, past, count)


@kernel
def decimate_by_two(x, count, branch, even, odd, scratch, out):
    """Halve the rate of ``2 * count`` samples in `x` by the same half-band filter.

    Lines `even` and `odd` keep the past of the two branches, ``len(branch) - 1`` and
    ``len(branch) / 2`` samples.
    """
    past = branch.shape[0] - 1
    middle = branch.shape[0] // 2
    for n in range(count):
        even[past + n] = x[2 * n]
        odd[middle + n] = x[2 * n + 1]
    convolve(even, count, branch, scratch)
    for n in range(count):
        out[n] = 0.5 * (scratch[n] + odd[n])
    keep_past(even, past, count)
    keep_past(odd, middle, count)
