"""Compiled loops of the detector: whitening, harmonic bases, and the scan of many series over band and backgrounds.

The covariance rho exp(-lag/tau) + (1 - rho) I is whitened by its innovations (a Kalman filter of one state), in
O(samples). Sums run in one fixed order, series by series, so a series' numbers never depend on its company.
"""

from __future__ import annotations

import math

import numpy as np

from cohort.compiled import jit

TREND = 3  # constant, linear and quadratic


@jit
def turn(x):  # type: ignore[no-untyped-def]
    """cos and sin of 2 pi x from + - * alone, to about 1e-16."""
    quarters = np.rint(4.0 * x)
    a = 2.0 * math.pi * (x - 0.25 * quarters)
    s = a * a
    c = 1.0
    d = 1.0
    for k in range(9, 0, -1):
        c = 1.0 - c * s / ((2.0 * k - 1.0) * (2.0 * k))
        d = 1.0 - d * s / ((2.0 * k) * (2.0 * k + 1.0))
    d = d * a
    quadrant = int(quarters) & 3
    if quadrant == 0:
        return c, d
    if quadrant == 1:
        return -d, c
    if quadrant == 2:
        return -c, -d
    return d, -c


@jit
def gains(phi, rho, gain, root):  # type: ignore[no-untyped-def]
    """Fill the filter's gain and innovation SD at each time; phi[i] is exp(-step/tau) to time i, phi[0] = 0."""
    spread = 0.0
    for i in range(phi.size):
        ahead = phi[i] * phi[i] * spread + rho * (1.0 - phi[i] * phi[i])
        total = ahead + (1.0 - rho)
        gain[i] = ahead / total
        root[i] = np.sqrt(total)
        spread = ahead - gain[i] * ahead


@jit
def whiten(columns, phi, gain, root):  # type: ignore[no-untyped-def]
    """Replace float64[times, m] columns by their standardised innovations."""
    state = np.zeros(columns.shape[1])
    for i in range(columns.shape[0]):
        for j in range(columns.shape[1]):
            ahead = phi[i] * state[j]
            surprise = columns[i, j] - ahead
            state[j] = ahead + gain[i] * surprise
            columns[i, j] = surprise / root[i]


@jit
def colour(normals, phi, gain, root):  # type: ignore[no-untyped-def]
    """The reverse of `whiten`, in place: float64[n, times] independent normals become series of that covariance."""
    for s in range(normals.shape[0]):
        state = 0.0
        for i in range(normals.shape[1]):
            ahead = phi[i] * state
            surprise = root[i] * normals[s, i]
            state = ahead + gain[i] * surprise
            normals[s, i] = ahead + surprise


@jit
def _orthonormal(columns, first):  # type: ignore[no-untyped-def]
    """Gram-Schmidt, twice, of columns first.. against all before; a dependent column becomes 0. Returns the lengths."""
    n, m = columns.shape
    lengths = np.zeros(m)
    for j in range(first, m):
        before = 0.0
        for i in range(n):
            before += columns[i, j] * columns[i, j]
        for _ in range(2):
            for l in range(j):
                dot = 0.0
                for i in range(n):
                    dot += columns[i, l] * columns[i, j]
                for i in range(n):
                    columns[i, j] -= dot * columns[i, l]
        after = 0.0
        for i in range(n):
            after += columns[i, j] * columns[i, j]
        lengths[j] = np.sqrt(after)
        scale = 1.0 / lengths[j] if after > 1e-12 * before and after > 0.0 else 0.0
        for i in range(n):
            columns[i, j] *= scale
    return lengths


@jit
def bases(times, frequencies, phi, gain, root, trend, harmonics):  # type: ignore[no-untyped-def]
    """Fill orthonormal whitened bases: trend float64[times, 3] and harmonics float64[times, 2 F] (cosines first).

    Returns the product of the trend's squared lengths (the determinant of its Gram matrix).
    """
    n, bands = times.size, frequencies.size
    centre = 0.5 * (times[0] + times[n - 1])
    half = 0.5 * (times[n - 1] - times[0])
    for i in range(n):
        x = (times[i] - centre) / half
        trend[i, 0], trend[i, 1], trend[i, 2] = 1.0, x, x * x
        for f in range(bands):
            harmonics[i, f], harmonics[i, bands + f] = turn(frequencies[f] * (times[i] - centre))
    whiten(trend, phi, gain, root)
    whiten(harmonics, phi, gain, root)
    lengths = _orthonormal(trend, 0)
    work = np.empty((n, TREND + 2))
    for f in range(bands):
        for i in range(n):
            for j in range(TREND):
                work[i, j] = trend[i, j]
            work[i, TREND], work[i, TREND + 1] = harmonics[i, f], harmonics[i, bands + f]
        _orthonormal(work, TREND)
        for i in range(n):
            harmonics[i, f], harmonics[i, bands + f] = work[i, TREND], work[i, TREND + 1]
    return (lengths[0] * lengths[1] * lengths[2]) ** 2


@jit
def indicators(trend, phi, gain, root, rows):  # type: ignore[no-untyped-def]
    """Fill float64[times, times]: row i the whitened indicator of sample i, the trend taken out."""
    n = phi.size
    column = np.empty((n, 1))
    for t in range(n):
        column[:] = 0.0
        column[t, 0] = 1.0
        whiten(column, phi, gain, root)
        rows[t] = column[:, 0]
        _remove(rows[t], trend)


@jit
def _remove(z, trend):  # type: ignore[no-untyped-def]
    for _ in range(2):
        for j in range(trend.shape[1]):
            dot = 0.0
            for i in range(z.size):
                dot += trend[i, j] * z[i]
            for i in range(z.size):
                z[i] -= dot * trend[i, j]


@jit
def _projections(z, harmonics, total):  # type: ignore[no-untyped-def]
    """total[j] = sum over i of z[i] harmonics[i, j], the samples in order."""
    n, m = harmonics.shape
    total[:] = 0.0
    i = 0
    while i + 4 <= n:
        a, b, c, d = z[i], z[i + 1], z[i + 2], z[i + 3]
        p, q, r, s = harmonics[i], harmonics[i + 1], harmonics[i + 2], harmonics[i + 3]
        for j in range(m):
            total[j] = (((total[j] + a * p[j]) + b * q[j]) + c * r[j]) + d * s[j]
        i += 4
    while i < n:
        for j in range(m):
            total[j] += z[i] * harmonics[i, j]
        i += 1


@jit
def _whitened(y, phi, gain, root, trend, z):  # type: ignore[no-untyped-def]
    state = 0.0
    for i in range(y.size):
        ahead = phi[i] * state
        surprise = y[i] - ahead
        state = ahead + gain[i] * surprise
        z[i] = surprise / root[i]
    _remove(z, trend)
    square = 0.0
    for i in range(z.size):
        square += z[i] * z[i]
    return square


@jit
def scan(values, phi, gain, root, trend, harmonics, squares, power, place):  # type: ignore[no-untyped-def]
    """Scan complete series float64[n, times] against one background.

    Fills, per series: the whitened sum of squares about the trend, the most that one harmonic takes of it, and which.
    """
    bands = harmonics.shape[1] // 2
    z, total = np.empty(values.shape[1]), np.empty(2 * bands)
    for s in range(values.shape[0]):
        squares[s] = _whitened(values[s], phi, gain, root, trend, z)
        _projections(z, harmonics, total)
        best, where = -1.0, 0
        for f in range(bands):
            taken = total[f] * total[f] + total[bands + f] * total[bands + f]
            if taken > best:
                best, where = taken, f
        power[s], place[s] = best, where


@jit
def scan_missing(  # type: ignore[no-untyped-def]
    values, missing, phi, gain, root, trend, harmonics, rows, cross, squares, power, place, mantissa, exponent
):
    """The same for series with missing samples (values there 0, `missing` True).

    A sample is missing where its indicator is one more regressor: so the bases of the whole schedule serve every
    pattern. `rows` from `indicators`, cross = rows @ harmonics. Also fills the determinant of the indicators' Gram
    matrix as mantissa x 2^exponent.
    """
    n, bands = values.shape[1], harmonics.shape[1] // 2
    z, total = np.empty(n), np.empty(2 * bands)
    gram = np.empty((3, bands))
    for s in range(values.shape[0]):
        at = np.flatnonzero(missing[s])
        m = at.size
        squares[s] = _whitened(values[s], phi, gain, root, trend, z)
        _projections(z, harmonics, total)
        factor, left = np.empty((m, m)), np.empty(m)
        solved = np.empty((m, 2 * bands))
        mantissa[s], exponent[s] = 1.0, 0
        gram[0], gram[1], gram[2] = 1.0, 0.0, 1.0
        for i in range(m):
            row = rows[at[i]]
            for l in range(i + 1):
                dot = 0.0
                for t in range(n):
                    dot += row[t] * rows[at[l], t]
                for k in range(l):
                    dot -= factor[i, k] * factor[l, k]
                factor[i, l] = np.sqrt(max(dot, 1e-300)) if l == i else dot / factor[l, l]
            diagonal = factor[i, i]
            part, shift = math.frexp(mantissa[s] * diagonal * diagonal)
            mantissa[s] = part
            exponent[s] += shift
            dot = 0.0
            for t in range(n):
                dot += row[t] * z[t]
            for k in range(i):
                dot -= factor[i, k] * left[k]
            left[i] = dot / diagonal
            squares[s] -= left[i] * left[i]
            mine = solved[i]
            mine[:] = cross[at[i]]
            for k in range(i):
                weight = factor[i, k]
                other = solved[k]
                for j in range(2 * bands):
                    mine[j] -= weight * other[j]
            scale = 1.0 / diagonal
            for j in range(2 * bands):
                mine[j] *= scale
                total[j] -= left[i] * mine[j]
            for f in range(bands):
                gram[0, f] -= mine[f] * mine[f]
                gram[1, f] -= mine[f] * mine[bands + f]
                gram[2, f] -= mine[bands + f] * mine[bands + f]
        best, where = -1.0, 0
        for f in range(bands):
            taken = _taken(total[f], total[bands + f], gram[0, f], gram[1, f], gram[2, f])
            if taken > best:
                best, where = taken, f
        power[s], place[s] = best, where


@jit
def _taken(u, v, a, b, d):  # type: ignore[no-untyped-def]
    """(u v) G^-1 (u v)' for G = [[a b][b d]], the second direction left out where it is as good as lost."""
    if not a > 1e-9:
        return v * v / d if d > 1e-9 else 0.0
    rest = d - b * b / a
    first = u * u / a
    if not rest > 1e-9:
        return first
    w = v - b * u / a
    return first + w * w / rest


@jit
def _fit(y, times, centre, half, f, tau_phi, rho, halves):  # type: ignore[no-untyped-def]
    """GLS of trend and harmonic at one frequency on the samples present.

    Returns (sum of squares about the trend, part the harmonic takes, coefficients: cosine and sine, or those of the
    first half then of the second; the whitened orthonormal columns; the innovations of y about trend and harmonic).
    """
    n = times.size
    m = TREND + (4 if halves else 2)
    phi, gain, root = tau_phi, np.empty(n), np.empty(n)
    gains(phi, rho, gain, root)
    work = np.zeros((n, m + 1))
    for i in range(n):
        x = (times[i] - centre) / half
        work[i, 0], work[i, 1], work[i, 2] = 1.0, x, x * x
        c, s = turn(f * (times[i] - centre))
        shift = 2 if halves and x >= 0.0 else 0
        work[i, TREND + shift], work[i, TREND + shift + 1] = c, s
        work[i, m] = y[i]
    whiten(work, phi, gain, root)
    upper = np.zeros((m + 1, m + 1))
    for j in range(m + 1):  # modified Gram-Schmidt with y as the last column: least squares and its residual
        before = 0.0
        for i in range(n):
            before += work[i, j] * work[i, j]
        for l in range(j):
            dot = 0.0
            for i in range(n):
                dot += work[i, l] * work[i, j]
            upper[l, j] = dot
            for i in range(n):
                work[i, j] -= dot * work[i, l]
        if j < m:
            after = 0.0
            for i in range(n):
                after += work[i, j] * work[i, j]
            upper[j, j] = np.sqrt(after) if after > 1e-12 * before else 0.0
            scale = 1.0 / upper[j, j] if upper[j, j] > 0.0 else 0.0
            for i in range(n):
                work[i, j] *= scale
    coefficients = np.zeros(m)
    for j in range(m - 1, -1, -1):
        value = upper[j, m]
        for l in range(j + 1, m):
            value -= upper[j, l] * coefficients[l]
        coefficients[j] = value / upper[j, j] if upper[j, j] > 0.0 else 0.0
    taken = 0.0
    for j in range(TREND, m):
        taken += upper[j, m] * upper[j, m]
    rest = 0.0
    for i in range(n):
        rest += work[i, m] * work[i, m]
    return rest + taken, taken, coefficients[TREND:], work, rest


@jit
def refine(y, times, phi, rho, frequency, step, low, high, out):  # type: ignore[no-untyped-def]
    """Describe the best harmonic of one series (present samples only), near `frequency` of the grid.

    Fills out: frequency, its standard error, amplitude (half peak to trough), the second half's amplitude over the
    first half's. The standard error is the linear one under the fitted background.
    """
    n = times.size
    centre = 0.5 * (times[0] + times[n - 1])
    half = 0.5 * (times[n - 1] - times[0])
    f = frequency
    for _ in range(4):
        left = _fit(y, times, centre, half, f - step, phi, rho, False)[1]
        here = _fit(y, times, centre, half, f, phi, rho, False)[1]
        right = _fit(y, times, centre, half, f + step, phi, rho, False)[1]
        bend = left - 2.0 * here + right
        move = 0.5 * (left - right) / bend if bend < 0.0 else 0.0
        f = min(max(f + step * min(max(move, -1.0), 1.0), low), high)
        step *= 0.3
    _, _, found, work, rest = _fit(y, times, centre, half, f, phi, rho, False)
    out[0] = f
    out[2] = np.sqrt(found[0] * found[0] + found[1] * found[1])
    gain, root = np.empty(n), np.empty(n)
    gains(phi, rho, gain, root)
    slope = np.empty((n, 1))
    for i in range(n):
        c, s = turn(f * (times[i] - centre))
        slope[i, 0] = 2.0 * math.pi * (times[i] - centre) * (found[1] * c - found[0] * s)
    whiten(slope, phi, gain, root)
    column = slope[:, 0].copy()
    _remove(column, work[:, : TREND + 2])
    information = 0.0
    for i in range(n):
        information += column[i] * column[i]
    freedom = max(n - TREND - 3, 1)
    out[1] = np.sqrt(rest / freedom / information) if information > 0.0 else np.inf
    # unweighted: a background fitted beside a steady rhythm takes what a decaying one leaves for its own
    found = _fit(y, times, centre, half, f, np.zeros(n), 0.0, True)[2]
    first = np.sqrt(found[0] * found[0] + found[1] * found[1])
    second = np.sqrt(found[2] * found[2] + found[3] * found[3])
    out[3] = second / first if first > 0.0 else np.inf


@jit
def share_at(y, times, frequency):  # type: ignore[no-untyped-def]
    """The share of the sum of squares about a quadratic trend that a harmonic at `frequency` takes (white noise)."""
    n = times.size
    phi = np.zeros(n)
    total, taken = _fit(y, times, 0.5 * (times[0] + times[n - 1]), 0.5 * (times[n - 1] - times[0]), frequency, phi,
                        0.0, False)[:2]  # fmt: skip
    return taken / total if total > 0.0 else 0.0


@jit
def pulses(y, swing):  # type: ignore[no-untyped-def]
    """Peaks whose rise from the nadir before and fall to the nadir after both exceed `swing`."""
    count = 0
    low = high = y[0]
    rising = False
    for value in y:
        if rising:
            if value > high:
                high = value
            elif high - value > swing:
                count += 1
                rising = False
                low = value
        elif value < low:
            low = value
        elif value - low > swing:
            rising = True
            high = value
    return count


@jit
def detrended(y, present):  # type: ignore[no-untyped-def]
    """The evenly spaced samples present about their own least-squares quadratic; 0 where missing."""
    n = y.size
    work = np.zeros((n, TREND))
    out = np.zeros(n)
    for i in range(n):
        if present[i]:
            x = 2.0 * i / (n - 1.0) - 1.0
            work[i, 0], work[i, 1], work[i, 2] = 1.0, x, x * x
            out[i] = y[i]
    _orthonormal(work, 0)
    _remove(out, work)
    return out


@jit
def correlogram(y, present, first, last):  # type: ignore[no-untyped-def]
    """The highest local maximum of the autocorrelation of y (evenly spaced, detrended) at lags first..last.

    Returns (correlation, lag in samples), NaN where there is none. Pairs with a missing sample are left out.
    """
    n = y.size
    square, count = 0.0, 0
    for i in range(n):
        if present[i]:
            square += y[i] * y[i]
            count += 1
    values = np.full(last + 2, np.nan)
    for lag in range(max(first - 1, 0), min(last + 2, n)):
        dot, pairs = 0.0, 0
        for i in range(n - lag):
            if present[i] and present[i + lag]:
                dot += y[i] * y[i + lag]
                pairs += 1
        if pairs > 0 and square > 0.0:
            values[lag] = dot / pairs * count / square * (n - lag) / n
    best, where = np.nan, np.nan
    for lag in range(first, last + 1):
        a, b, c = values[lag - 1], values[lag], values[lag + 1]
        if b >= a and b >= c and not best >= b:
            bend = a - 2.0 * b + c
            best, where = b, lag + (0.5 * (a - c) / bend if bend < 0.0 else 0.0)
    return best, where


@jit
def describe(  # type: ignore[no-untyped-def]
    values, times, phi, rho, fitted, place, frequencies, swing, forcing, lags, out
):
    """What takes each series by itself: float64[n, times] with NaN where missing.

    phi float64[backgrounds, times] and rho of the grid; `fitted` and `place` the background and frequency of each
    best rhythm; swing relative to the mean; forcing frequency, NaN for none; lags (first, last), last 0 for no
    autocorrelation. Fills out[n, 9]: frequency, its standard error, amplitude, half ratio, mean, pulses, power at the
    forcing, autocorrelation, its lag in samples.
    """
    n = values.shape[1]
    step = frequencies[1] - frequencies[0]
    low, high = frequencies[0], frequencies[frequencies.size - 1]
    for s in range(values.shape[0]):
        present = ~np.isnan(values[s])
        m = present.sum()
        y, at, kept = np.empty(m), np.empty(m), np.empty(m)
        j, ahead, total = 0, 1.0, 0.0
        for i in range(n):
            ahead *= phi[fitted[s], i]
            if present[i]:
                y[j], at[j], kept[j] = values[s, i], times[i], ahead
                total += y[j]
                j, ahead = j + 1, 1.0
        kept[0] = 0.0
        mean = total / m
        y -= mean
        refine(y, at, kept, rho[fitted[s]], frequencies[place[s]], step, low, high, out[s])
        out[s, 4] = mean
        out[s, 5] = pulses(y, swing * mean)
        out[s, 6] = share_at(y, at, forcing[s]) if forcing[s] > 0.0 else np.nan
        out[s, 7] = out[s, 8] = np.nan
        if lags[1] > 0:
            out[s, 7], out[s, 8] = correlogram(detrended(values[s], present), present, lags[0], lags[1])
