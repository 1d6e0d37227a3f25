"""Zakharov-Shabat scattering transform of wave envelopes: eigenvalues and group content.

Everything works in the scaled units of `scaled_envelope`: q = conj(k0 A)/sqrt(2) (deep water)
over T = omega0 t, so that one carrier period is 2 pi and i q_X + q_TT + 2 |q|^2 q = 0 downwave;
X = x / `evolution_scale` (1/k0 in deep water).  **A step in seconds passed as dt gives wrong
numbers without an error**: only `scaled_envelope` converts metres and seconds.

The spectral problem is v1' = -i l v1 + q v2, v2' = -q* v1 + i l v2 (Zakharov & Shabat 1972) with
q = 0 outside the samples.  An eigenvalue l = xi + i eta is an envelope soliton of height 2 eta and
velocity dT/dX = -4 xi; the eigenvalues of an isolated packet do not change as it travels.  A
window cut out of a sea is not isolated: its eigenvalues describe the group as it is now, and do
change as waves enter and leave the window.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np

from forecaster.datatypes import Envelope, WaveGroup
from forecaster.errors import InputError, NumericsError
from forecaster.waves.linear import (
    GRAVITY,
    group_ratio,
    group_velocity,
    nonlinear_coefficient,
)

_PARABOLA_LIMIT = 16.0  # the parabola of the variance is not believed below 1/16 of its start
_CACHE = 2**14  # complex numbers worked on at a time
_LEAF = 8  # shortest run of samples that is multiplied out directly
_PIECE_AREA = 20.0  # largest integral of |q| over one piece: about six eigenvalues
_SPAN_AREA = 60.0  # the same where only the phase of a is wanted
_SPAN_DECAY = 16.0  # and largest -log |A| of one piece along the upper side of the contour
_GRID_RATIO = 1.3  # of neighbouring heights in the grid of starting points
# Round by round: where boxes of missing zeros are cut, and from what share of max |q| on a box
# with one zero need not be cut again
_CUTS = ((0.5377, 0.1), (0.4812, 0.01), (0.5513, 0.001))
_ORDERS = (2, 4, 6, 8)
_MARGIN = 1.05  # of the contour above max |q|, where no eigenvalue can be
_PHASE_STEP = np.pi / 2  # largest change of arg a allowed between neighbours on the contour


def _substeps(q, parts):
    """Band-limited values of q (..., n) at the mid-points of `parts` equal pieces of each step.

    The straight line between the end values is set apart first, so that only the remainder,
    which vanishes at both ends, is taken as periodic; a constant is reproduced exactly.
    """
    if parts == 1:
        return q
    n = q.shape[-1]
    index = np.arange(n)
    slope = (q[..., -1:] - q[..., :1]) / max(n - 1, 1)
    spectrum = np.fft.fft(q - q[..., :1] - slope * index)
    omega = 2 * np.pi * np.fft.fftfreq(n)
    out = np.empty((*q.shape, parts), complex)
    for j in range(parts):
        shift = (j + 0.5) / parts - 0.5
        turn = np.exp(1j * omega * shift)
        if n % 2 == 0:
            turn[n // 2] = np.cos(np.pi * shift)
        out[..., j] = np.fft.ifft(spectrum * turn) + q[..., :1] + slope * (index + shift)
    return out.reshape(*q.shape[:-1], n * parts)


def _halved_length(n, unit):
    """Length not below n that halves down to leaves, `unit` (a power of 2) pieces at least."""
    while n / unit > 2 * _LEAF:
        unit *= 2
    return -(-n // unit) * unit


def _transfer_polynomials(q, step, fine, coarse):
    """Split-step transfer matrices of each row of q (w, n) cut into `fine` and `coarse` pieces.

    Returns two arrays (2, w, pieces, p), n = pieces p: the coefficients a_k, b_k of the first
    column of Q_p W Q_(p-1) W ... Q_1, W = diag(1, z), z = exp(2 i lambda step); Q the exponential
    of the potential over one step.  `fine` is `coarse` times a power of 2.
    """
    rows, n = q.shape
    length = n // fine
    size = np.abs(q) * step
    leaf = length
    while leaf % 2 == 0 and leaf > 2 * _LEAF:
        leaf //= 2
    cosine = np.cos(size).reshape(-1, leaf, 1)
    upper = (step * np.sinc(size / np.pi) * q).reshape(-1, leaf, 1)
    lower = -np.conj(upper)
    z = np.exp(-2j * np.pi * np.arange(leaf) / leaf)
    a = np.repeat(cosine[:, 0].astype(complex), leaf, axis=1)
    b = np.repeat(lower[:, 0], leaf, axis=1)
    for i in range(1, leaf):
        b *= z
        a, b = cosine[:, i] * a + upper[:, i] * b, lower[:, i] * a + cosine[:, i] * b
    # Values on the m-th roots of unity -> product of neighbours on the 2m-th: the even points are
    # the old ones, where z^m = 1; on the odd ones z^m = -1.
    values = np.stack([a, b])
    coefficients = []
    while True:
        if values.shape[1] == rows * fine:
            coefficients.append(np.fft.ifft(values).reshape(2, rows, fine, -1))
        if values.shape[1] == rows * coarse:
            coefficients.append(np.fft.ifft(values).reshape(2, rows, coarse, -1))
            return coefficients
        m = values.shape[2]
        odd = np.fft.fft(np.fft.ifft(values) * np.exp(-1j * np.pi * np.arange(m) / m))
        product = np.empty((2, values.shape[1] // 2, 2 * m), complex)
        for part, sign, at in ((0, 1, values), (1, -1, odd)):
            (a_left, a_right), (b_left, b_right) = ((x[0::2], x[1::2]) for x in at)
            product[0, :, part::2] = a_right * a_left - sign * np.conj(b_right) * b_left
            product[1, :, part::2] = b_right * a_left + sign * np.conj(a_right) * b_left
        values = product


def _extrapolation(parts):
    """Richardson weights that remove step^2, step^4, ... for steps dt/parts."""
    squares = np.array(parts, float) ** 2
    return [np.prod([s / (s - other) for other in squares if other != s]) for s in squares]


class _Jost:
    """a(lambda) = v1 exp(i lambda T) at the right end of the potential, for each row of q.

    The transfer matrix of a piece of the potential, exp(-i lambda length) set apart, is
    [[A, C], [B, D]] with A = sum a_k z^k, B = sum b_k z^(k+1/2),
    C = -sum conj(b_(n-1-k)) z^(k+1/2) and D = sum conj(a_(n-1-k)) z^(k+1), all bounded in the
    upper half plane.  The record is cut into pieces so short that |A| of each stays far above
    rounding, although a(lambda) of a long record, nearly the product of them, may be smaller than
    rounding.  For the phase of a on whole lines longer pieces are enough.
    """

    corner_only = True
    density = 5  # points of the contour for each sample
    least_height = 0.0  # zeros below are not looked for, whatever the floor

    def __init__(self, levels, dt, *, least_pieces=1):
        """levels: {parts: (w, n parts) samples}, n the same for all."""
        self.dt = dt
        coarse, first = min(levels.items())
        self.rows, self.n = first.shape[0], first.shape[1] // coarse
        size = np.abs(first)
        area = size.sum(axis=1).max(initial=0) * dt / coarse
        # semiclassically -log |A| is the integral of eta - (eta^2 - |q|^2)^(1/2)
        top = _MARGIN * size.max(axis=1, keepdims=True)
        decay = (top - np.sqrt(top**2 - size**2)).sum(axis=1).max(initial=0) * dt / coarse
        self.pieces = self._number(max(least_pieces, area / _PIECE_AREA))
        spans = self._number(max(area / _SPAN_AREA, decay / _SPAN_DECAY))
        self.spans = min(self.pieces, spans)
        self.padded = _halved_length(self.n, self.pieces)
        self.parts = tuple(levels)
        self.weights = _extrapolation(self.parts)
        self.polynomials, self.long_polynomials = [], []
        for parts, q in levels.items():
            # zeros in front change neither a nor b
            filled = np.zeros((self.rows, self.padded * parts), complex)
            filled[:, self.padded * parts - q.shape[1] :] = q
            fine, long = _transfer_polynomials(filled, dt / parts, self.pieces, self.spans)
            self.polynomials.append(self._entries(fine))
            self.long_polynomials.append(self._entries(long))

    def _number(self, wanted):
        """Power of 2 not below `wanted`, but pieces no shorter than `_LEAF` samples."""
        return 2 ** int(np.ceil(np.log2(min(max(1, wanted), max(1, self.n // _LEAF)))))

    def _entries(self, coefficients):
        """(w, pieces, 1 or 4, length) coefficients of A, or of A, B, C, D."""
        a, b = coefficients
        if a.shape[1] == 1 and self.corner_only:
            return a[:, :, None]
        mirrored = -np.conj(b[..., ::-1]), np.conj(a[..., ::-1])
        return np.stack([a, b, *mirrored], axis=2)

    def on_lines(self, eta, columns, half, rows, orders):
        """Values at xi_j + i eta, xi_j = pi j/(columns dt), |j| <= half.

        eta (w, r) -> (w, r, 2 half + 1).  Only the first `orders` polynomials are extrapolated:
        1 gives a cheap, second-order value.
        """
        weights = _extrapolation(self.parts[:orders])
        angle = np.pi / columns * np.arange(-half, half + 1)
        result = np.empty((*eta.shape, angle.size), complex)
        polynomials = [p if rows.size == self.rows else p[rows] for p in self.long_polynomials]
        # as many lines at a time as stay in cache
        chunk = max(1, _CACHE // (polynomials[0][..., 0].size * columns))
        for first in range(0, eta.shape[1], chunk):
            depth = self.dt * eta[:, first : first + chunk, None, None, None]
            step = 1j * angle - depth[..., 0, 0]
            total = 0
            for parts, weight, polynomial in zip(self.parts, weights, polynomials, strict=False):
                size = columns * parts
                decay = np.exp(-2 / parts * depth * np.arange(polynomial.shape[3]))
                values = np.fft.ifft(polynomial[:, None] * decay, size)
                ends = [values[..., size - half :], values[..., : half + 1]]
                values = size * np.concatenate(ends, axis=-1)
                if values.shape[3] > 1:
                    root = np.exp((1j * angle - depth[..., 0]) / parts)
                    values[..., 1, :] *= root
                    values[..., 2, :] *= root
                    values[..., 3, :] *= root * root
                total = total + weight * self.value(values.transpose(2, 3, 0, 1, 4), step)
            result[:, first : first + chunk] = total
        return result

    def entries_at(self, row, lam):
        """Entries (pieces, 1 or 4, g) of the matrices at lam (g,) of rows row (g,), and slopes.

        One pair for each of the step sizes.
        """
        for parts, polynomial in zip(self.parts, self.polynomials, strict=True):
            # z^(outer + inner): two short Vandermonde products instead of a long one
            exponent = 2j * self.dt / parts
            length = polynomial.shape[3]
            width = next(w for w in range(int(np.sqrt(length)), 0, -1) if length % w == 0)
            inner, outer = np.arange(width)[:, None], np.arange(0, length, width)[:, None]
            low = np.exp(exponent * inner * lam)
            low = np.stack([low, low * inner], axis=1)  # (width, 2, g)
            high = np.exp(exponent * outer * lam)
            folded = polynomial.reshape(*polynomial.shape[:3], outer.size, width)
            if self.rows == 1:
                sums = folded[0] @ low.reshape(width, -1)
                sums = sums.reshape(*sums.shape[:-1], 2, lam.size)
            else:
                sums = folded[row] @ low.transpose(2, 0, 1)[:, None, None]
                sums = sums.transpose(1, 2, 3, 4, 0)
            sums, moments = sums[..., 0, :], sums[..., 1, :]  # (pieces, 1 or 4, outer, g)
            here = (high * sums).sum(axis=2)
            there = exponent * (high * (outer * sums + moments)).sum(axis=2)
            if here.shape[1] > 1:
                shift = exponent * np.array([0, 0.5, 0.5, 1])[:, None]
                factor = np.exp(shift * lam)
                there = (there + shift * here) * factor
                here = here * factor
            yield here, there

    def at(self, row, lam):
        """Value and derivative at points lam (g,) of rows row (g,)."""
        # so few at a time that the linear algebra library finds each product too small to share
        # among threads, which costs far more than it gains on a busy machine
        most = max(1, 2**14 // self.polynomials[-1].shape[3])
        value, slope = np.zeros((2, lam.size), complex)
        for first in range(0, lam.size, most):
            part = slice(first, first + most)
            pairs = self.entries_at(row[part], lam[part])
            for weight, (entries, slopes) in zip(self.weights, pairs, strict=True):
                a, da = self.value_and_slope(entries, slopes, lam[part])
                value[part] += weight * a
                slope[part] += weight * da
        return value, slope

    def value(self, entries, step):
        """a from the entries (pieces, 1 or 4, ...) of all pieces; step is i lambda dt."""
        state = entries[0, :2]
        for m in entries[1:]:
            state = _apply(m, state)
        return state[0]

    def value_and_slope(self, entries, slopes, lam):
        """a and da/dlambda."""
        state, change = entries[0, :2], slopes[0, :2]
        for m, dm in zip(entries[1:], slopes[1:], strict=True):
            state, change = _apply(m, state), _apply(m, change) + _apply(dm, state)
        return state[0], change[0]


def _apply(m, state):
    """Matrix of entries m (4, ...) = (11, 21, 12, 22) times the column `state` (2, ...)."""
    return np.stack([m[0] * state[0] + m[2] * state[1], m[1] * state[0] + m[3] * state[1]])


class _Floquet(_Jost):
    """exp(i lambda L)(trace of the monodromy matrix - 2 sign), for each row of periodic q."""

    corner_only = False
    density = 10  # its zeros may be double

    def __init__(self, levels, dt, *, sign):
        super().__init__(levels, dt)
        self.sign = sign
        # on the real axis there is a zero every pi/length, and a wave train of small energy lies
        # just above: nearer to it than half a step of the contour nothing can be told apart
        self.least_height = 0.5 * np.pi / (self.density * self.n * dt)

    def value(self, entries, step):
        columns = entries[0, :2], entries[0, 2:]
        for m in entries[1:]:
            columns = [_apply(m, column) for column in columns]
        return columns[0][0] + columns[1][1] - 2 * self.sign * np.exp(self.padded * step)

    def value_and_slope(self, entries, slopes, lam):
        value = slope = 0
        for i, start in enumerate((slice(0, 2), slice(2, 4))):
            state, change = entries[0, start], slopes[0, start]
            for m, dm in zip(entries[1:], slopes[1:], strict=True):
                state, change = _apply(m, state), _apply(m, change) + _apply(dm, state)
            value, slope = value + state[i], slope + change[i]
        length = 1j * self.padded * self.dt
        half_turn = 2 * self.sign * np.exp(length * lam)
        return value - half_turn, slope - length * half_turn


def _turns(phase, axis):
    """Whole turns between neighbours: rint of the phase difference over 2 pi."""
    return np.rint(np.diff(phase, axis=axis) / (2 * np.pi))


def _guesses(function, rows, floor, top, columns, half):
    """One estimate of a zero in every grid cell around which arg a turns, as (row, lambda)."""
    count = max(3, int(np.ceil(np.log(top / floor).max() / np.log(_GRID_RATIO))) + 1)
    eta = floor[:, None] * (top / floor)[:, None] ** np.linspace(0, 1, count)
    values = function.on_lines(eta, columns, half, rows, 1)
    phase = np.angle(values)
    along, across = _turns(phase, 2), _turns(phase, 1)
    winding = along[:, 1:] - along[:, :-1] + across[:, :, :-1] - across[:, :, 1:]
    window, line, column = np.nonzero(winding > 0)
    step = np.pi / (columns * function.dt)
    low, high = eta[window, line], eta[window, line + 1]
    # A zero of (lambda - zero) exp(c0 + c1 lambda) through the four corners.  The cross ratio is
    # free of c0 and c1 and gives +-x, the zero relative to the centre; the sign whose c1 agrees
    # along both edges is right.
    a00, a10 = values[window, line, column], values[window, line, column + 1]
    a01, a11 = values[window, line + 1, column], values[window, line + 1, column + 1]
    width = high - low
    diagonal, other = (step + 1j * width) / 2, (step - 1j * width) / 2
    with np.errstate(divide="ignore", invalid="ignore"):  # a zero on a corner
        cross = a00 * a11 / (a10 * a01)
        x = np.sqrt((diagonal**2 - cross * other**2) / (1 - cross))
        x = np.stack([x, -x])
        c1 = np.log(a10 * (x + diagonal) / (a00 * (x - other))) / step
        mismatch = np.log(a01 * (x + diagonal) / (a00 * (x + other))) - 1j * width * c1
        mismatch.imag -= 2 * np.pi * np.rint(mismatch.imag / (2 * np.pi))
        x = np.where(np.abs(mismatch[0]) < np.abs(mismatch[1]), x[0], x[1])
    inside = (np.abs(x.real) < step) & (np.abs(x.imag) < width)
    start = step * (column - half + 0.5) + 0.5j * (low + high) + np.where(inside, x, 0)
    return rows[window], start


def _polish(function, row, start, scale, known=(), iterations=30):
    """Zeros of a near `start` (g,), made stationary together; returns (lambda, settled).

    Ehrlich-Aberth iteration: Newton's step on a divided by the factors
    (lambda - l_j)/(lambda - l_j*) of the other approximations of the same row and of the zeros
    already known, a list of (row, lambda), so that no two settle on one simple zero (Ehrlich
    1967; Aberth 1973).  The conjugate denominators are those of the Blaschke product that a is,
    up to a smooth factor, in the upper half plane; without them the step is useless where many
    eigenvalues lie close together.
    """
    lam = np.concatenate([start, [value for _, value in known]]).astype(complex)
    owner = np.concatenate([row, [r for r, _ in known]]).astype(int)
    best = np.full(start.shape, np.inf)
    settled = np.zeros(start.shape, bool)
    active = np.arange(start.size)
    for _ in range(iterations):
        if active.size == 0:
            break
        here = lam[active]
        value, slope = function.at(row[active], here)
        others = row[active, None] == owner
        gap = np.where(others, here[:, None] - lam, np.inf)
        gap[gap == 0] = np.inf
        mirror = np.where(others, here[:, None] - lam.conj(), np.inf)
        with np.errstate(divide="ignore", invalid="ignore"):
            pull = (1 / gap - 1 / mirror).sum(axis=1)
            move = -value / (slope - value * pull)
        lost = ~np.isfinite(move)
        move[lost] = 0
        size = np.abs(move)
        limit = scale[row[active]]
        # stationary: rounding is reached, the step shrinks no more
        done = (size < 1e-8 * limit) & (size >= 0.25 * best[active]) | (value == 0)
        settled[active] = done
        move *= np.minimum(1, 0.2 * limit / np.maximum(size, 1e-300))
        lam[active] = np.where(done, here, here + move)
        best[active] = np.minimum(best[active], size)
        lost |= lam[active].imag < -0.1 * limit
        active = active[~done & ~lost]
    return lam[: start.size], settled


def _turn(before, after):
    """Change of phase from complex `before` to `after`, in (-pi, pi]."""
    return np.angle(after * np.conj(before))


def _contour_count(function, rows, floor, top, columns, half):
    """Zeros of a inside floor < Im < top, |Re| < pi half/(columns dt); -1 as of `_windings`."""
    step = np.pi / (columns * function.dt)
    lines = function.on_lines(np.stack([floor, top], 1), columns, half, rows, len(function.parts))
    real = step * np.arange(-half, half + 1)
    # arg a may change by the length of the record for each unit of eta: points so close that it
    # changes by 3 at most, for a whole turn would pass unseen, and closer towards the floor
    even = np.linspace(0, 1, 2 + int(function.n * function.dt * top.max() / 3))[1:-1]
    eta = floor[:, None] * (top / floor)[:, None] ** np.linspace(0, 1, 16)[1:-1]
    eta = np.sort(np.hstack([eta, floor[:, None] + (top - floor)[:, None] * even]), axis=1)
    right, left = half * step + 1j * eta, -half * step + 1j * eta[:, ::-1]
    sides = np.concatenate([right, left], axis=1)
    values, _ = function.at(np.repeat(rows, sides.shape[1]), sides.ravel())
    on_right, on_left = np.split(values.reshape(sides.shape), 2, axis=1)
    points = [real + 1j * floor[:, None], right, real[::-1] + 1j * top[:, None], left]
    points = np.concatenate(points, axis=1)
    values = np.concatenate([lines[:, 0], on_right, lines[:, 1, ::-1], on_left], axis=1)
    return _windings(function, rows, points, values)


def _windings(function, rows, points, values):
    """Zeros of a inside closed lines (r, p), one for each of rows (r,), by the argument principle.

    The lines are halved wherever arg a changes by more than `_PHASE_STEP` between neighbours; -1
    where that does not end because a zero lies on the line.
    """
    after, value_after = np.roll(points, -1, axis=1), np.roll(values, -1, axis=1)
    turn = _turn(values, value_after)
    coarse = np.abs(turn) > _PHASE_STEP
    total = np.where(coarse, 0, turn).sum(axis=1)
    member, _ = np.nonzero(coarse)
    ends = np.stack([points[coarse], after[coarse]])
    at_ends = np.stack([values[coarse], value_after[coarse]])
    for _ in range(40):
        if member.size == 0:
            break
        middle = ends.mean(axis=0)
        at_middle, _ = function.at(rows[member], middle)
        ends = np.concatenate([[ends[0], middle], [middle, ends[1]]], axis=1)
        at_ends = np.concatenate([[at_ends[0], at_middle], [at_middle, at_ends[1]]], axis=1)
        member = np.concatenate([member, member])
        turn = _turn(*at_ends)
        coarse = np.abs(turn) > _PHASE_STEP
        np.add.at(total, member[~coarse], turn[~coarse])
        member, ends, at_ends = member[coarse], ends[:, coarse], at_ends[:, coarse]
    count = np.rint(total / (2 * np.pi)).astype(int)
    count[member] = -1
    return count


def _cluster(function, row, centre, scale):
    """The multiple zero near `centre`, repeated, and the radius in which it is all there is.

    Power sums of the zeros by the residue theorem on a circle, then Newton's identities (Delves &
    Lyness 1967); exact for multiple zeros, where Newton's iteration loses half its digits.  No
    zeros are returned unless those in the circle coincide.
    """
    angle = 2 * np.pi * np.arange(128) / 128
    for radius in scale * np.array([3e-3, 3e-4, 3e-2]):
        offset = radius * np.exp(1j * angle)
        value, slope = function.at(np.full(angle.size, row), centre + offset)
        with np.errstate(divide="ignore", invalid="ignore"):
            weight = slope / value * offset / angle.size
        sums = [(weight * offset**p).sum() for p in range(5)]
        if not np.isfinite(sums[0]) or abs(sums[0] - round(sums[0].real)) > 1e-6:
            continue
        count = round(sums[0].real)
        if not 2 <= count <= 4:
            continue
        coefficients = [1.0]
        for k in range(1, count + 1):
            coefficients.append(-sum(coefficients[k - i] * sums[i] for i in range(1, k + 1)) / k)
        zeros = centre + np.roots(coefficients)
        if np.ptp(zeros.real) + np.ptp(zeros.imag) < 1e-4 * scale:
            return zeros, radius
    return np.empty(0, complex), 0.0


def _side(q, dt, floor, top):
    """Largest |Re lambda| at which an eigenvalue with Im above `floor` can lie.

    An eigenvalue xi + i eta takes 4 eta of the integral of |q|^2 near frequency -2 xi: beyond the
    frequency above which less than a tenth of that is left there can be none.
    """
    n = q.shape[1]
    energy = np.abs(np.fft.fft(q)) ** 2 * (dt / n)
    order = np.argsort(-np.abs(np.fft.fftfreq(n)))
    beyond = np.cumsum(energy[:, order], axis=1)
    inside = (beyond > 0.4 * floor[:, None]).any(axis=0)
    if not inside.any():
        return top.max()
    edge = 2 * np.pi * np.abs(np.fft.fftfreq(n)[order[np.argmax(inside)]]) / dt
    return min(edge / 2 + top.max(), 0.49 * np.pi / dt)


def _eigenvalues(levels, dt, floor):
    """Certified eigenvalues of each row: a list of arrays, largest imaginary part first.

    levels : {parts: (w, n parts)} samples of q; floor : share of max |q|.
    """
    peak = _peak(levels)
    found = [np.empty(0, complex)] * peak.size
    live = np.flatnonzero(peak > 0)
    if live.size:
        levels = {parts: q[live] for parts, q in levels.items()}
        zeros = _zeros(_Jost(levels, dt), levels, peak[live], floor)
        for i, values in zip(live, zeros, strict=True):
            found[i] = values
    return found


def _peak(levels):
    return np.max([np.abs(q).max(axis=1) for q in levels.values()], axis=0)


def _fast_size(n):
    """Smallest 2^k, 3 2^k or 5 2^k that is not below n."""
    return min(f * 2 ** max(0, int(np.ceil(np.log2(n / f)))) for f in (1, 3, 5))


def _zeros(function, levels, peak, floor):
    """All zeros of `function` with floor peak < Im < 1.05 peak inside the band, per row.

    Raises NumericsError unless they number as many as the argument principle counts.
    """
    dt, rows = function.dt, np.arange(peak.size)
    top, low = _MARGIN * peak, np.maximum(floor * peak, function.least_height)
    coarse, first = min(levels.items())
    side = _side(first, dt / coarse, low, peak)

    def grid(columns):
        return columns, int(np.ceil(side * columns * dt / np.pi))

    contour = grid(_fast_size(function.density * function.n))
    edge = np.pi * contour[1] / (contour[0] * dt)
    count = _contour_count(function, rows, low, top, *contour)
    for _ in range(4):
        on_zero = np.flatnonzero(count < 0)
        if on_zero.size == 0:
            break
        low[on_zero] *= 0.995
        count[on_zero] = _contour_count(function, on_zero, low[on_zero], top[on_zero], *contour)
    zeros = [np.empty(0, complex) for _ in rows]
    suspects = [np.empty(0, complex) for _ in rows]
    missing = np.flatnonzero(count != 0)
    for attempt in range(1 + len(_CUTS)):
        if missing.size == 0:
            break
        known = []
        if attempt == 0:
            fine = grid(_fast_size(max(2.5 * function.n, min(10 * function.n, 1024))))
            row, start = _guesses(function, missing, 0.85 * low[missing], top[missing], *fine)
        else:
            known = [(i, value) for i in missing for value in zeros[i]]
            cut, alone = _CUTS[attempt - 1]
            starts = [
                _separated(
                    function, i, (-edge, edge, low[i], top[i]), zeros[i], cut, alone * peak[i]
                )
                for i in missing
            ]
            row = np.repeat(missing, [part.size for part in starts])
            start = np.concatenate(starts)
        lam, settled = _polish(function, row, start, peak, known)
        for i in missing:
            new = np.concatenate([zeros[i], lam[(row == i) & settled]])
            new = new[_within(new, low[i], top[i], edge)]
            first = _first_of_each(new, peak[i])
            zeros[i] = new[first]
            if zeros[i].size < count[i]:
                # what stalled, or came twice to one place, may mark a multiple zero
                doubtful = [suspects[i], lam[(row == i) & ~settled], new[~first]]
                suspects[i] = np.concatenate(doubtful)
                zeros[i] = _with_clusters(function, i, zeros[i], suspects[i], peak[i])
                zeros[i] = zeros[i][_within(zeros[i], low[i], top[i], edge)]
        missing = np.array([i for i in missing if zeros[i].size != count[i]], int)
    found = [values[np.argsort(-values.imag)] for values in zeros]
    if missing.size:
        i = missing[0]
        raise NumericsError(
            f"found {zeros[i].size} eigenvalues where the argument principle counts {count[i]}; "
            f"a finer step dt (now {dt:.4g}) or a higher floor is needed",
            achieved=found,
        )
    return found


def _separated(function, row, box, known, cut, small):
    """A start for each zero of one row that is in `box` and not among `known`.

    The box (left, right, low, top) is cut in two, at the share `cut` of its longer side, until the
    argument principle finds one zero in each part of size `small`, or a part is so much smaller
    that its zeros may be one multiple zero.
    """

    def count(left, right, low, top):
        corners = np.array([left + 1j * low, right + 1j * low, right + 1j * top, left + 1j * top])
        sides = [
            first + (last - first) * np.linspace(0, 1, 3 + int(abs(last - first) * length))[:-1]
            for first, last in zip(corners, np.roll(corners, -1), strict=True)
        ]
        line = np.concatenate(sides)
        values, _ = function.at(np.full(line.size, row), line)
        return int(_windings(function, np.array([row]), line[None], values[None])[0])

    def unknown(box, number):
        left, right, low, top = box
        inside = (known.real > left) & (known.real < right) & (known.imag > low)
        return number - (inside & (known.imag < top)).sum()

    length = function.n * function.dt
    starts, parts = [], [(box, count(*box))]
    while parts:
        (left, right, low, top), number = parts.pop()
        missing = unknown((left, right, low, top), number)
        size = max(right - left, top - low)
        if missing <= 0:
            continue
        if size < (small if number == 1 else 1e-3 * small):
            turn = np.exp(2j * np.pi * np.arange(missing) / missing)
            starts.append(0.5 * (left + right + 1j * (low + top)) + 0.1 * size * turn)
            continue
        if right - left > top - low:
            at = left + cut * (right - left)
            halves = (left, at, low, top), (at, right, low, top)
        else:
            at = low + cut * (top - low)
            halves = (left, right, low, at), (left, right, at, top)
        first = count(*halves[0])
        if first < 0:  # a zero on the cut: the next round cuts elsewhere
            continue
        parts += [(halves[0], first), (halves[1], number - first)]
    return np.concatenate(starts) if starts else np.empty(0, complex)


def _within(lam, low, top, edge):
    return (lam.imag > low) & (lam.imag < top) & (np.abs(lam.real) < edge)


def _first_of_each(lam, scale):
    """Mask of `lam` without repetitions closer than two simple zeros can be told apart."""
    near = np.abs(lam[:, None] - lam) < 1e-6 * scale
    return ~np.tril(near, -1).any(axis=1)


def _with_clusters(function, row, roots, suspects, scale):
    """`roots` completed by the multiple zeros near which the iteration left `suspects`."""
    suspects = suspects[np.isfinite(suspects) & (suspects.imag > 0)]
    while suspects.size:
        centre = suspects[0]
        cluster, radius = _cluster(function, row, centre, scale)
        roots = np.concatenate([roots[np.abs(roots - centre) >= radius], cluster])
        suspects = suspects[np.abs(suspects - centre) > max(radius, 1e-5 * scale)]
    return roots


def _curvature(envelope):
    """k0''(omega0) [s^2/m]: curvature of the exact linear dispersion at the carrier.

    From omega^2 = g k tanh kh: omega omega_kk = g h (1 - s^2)(1 - kh s) - cg^2 with s = tanh kh,
    and k_omega_omega = -omega_kk / cg^3; 2/g in deep water.
    """
    kh = envelope.k0 * envelope.depth
    speed = envelope.omega0 / envelope.k0 * group_ratio(kh)
    bend = 0.0
    if kh < 300:
        s = np.tanh(kh)
        bend = GRAVITY * envelope.depth * (1 - s**2) * (1 - kh * s)
    return float((speed**2 - bend) / (envelope.omega0 * speed**3))


def evolution_scale(envelope: Envelope) -> float:
    """Distance [m] travelled per unit of the scaled X: 2/(k0'' omega0^2), 1/k0 in deep water.

    >>> wave = Envelope(np.zeros(4), 0.5, 0.0, omega0=0.7, k0=0.7**2 / 9.81)
    >>> round(evolution_scale(wave) * wave.k0, 12)
    1.0
    """
    return 2 / (_curvature(envelope) * envelope.omega0**2)


def scaled_envelope(envelope: Envelope) -> tuple[np.ndarray, float]:
    """Dimensionless potential q and step of an envelope in metres and seconds.

    Parameters
    ----------
    envelope : Envelope
        values (..., n) [m], dt [s], omega0 [rad/s], k0 [rad/m], depth [m].

    Returns
    -------
    q : (..., n) complex array
        Zero where the water is so shallow (k0 h < 1.363) that the cubic term does not focus and
        there are no envelope solitons.
    dt : float
        omega0 times the step: 2 pi is one carrier period.

    Notes
    -----
    In the frame moving at cg, with beta = k0''/2 (`_curvature`) and the cubic coefficient
    gamma = X k0^3 / (2 n tanh kh) (`nonlinear_coefficient` X, n = cg/c), the space-like NLS is

        A_x = -i beta A_tt - i gamma |A|^2 A.

    Conjugate it, put T = omega0 t and x = X / (beta omega0^2):

        i A*_X + A*_TT + gamma/(beta omega0^2) |A|^2 A* = 0,

    which is i q_X + q_TT + 2 |q|^2 q = 0 for q = A* sqrt(gamma / (2 beta omega0^2)).  In deep
    water beta = 1/g = k0/omega0^2 and gamma = k0^3, hence q = conj(k0 A)/sqrt(2), X = k0 x.
    Valid for a narrow spectrum.  Sources: Lo & Mei (1985), J. Fluid Mech. 150; Hasimoto & Ono
    (1972) for the finite depth.

    Examples
    --------
    >>> wave = Envelope(np.full(4, 2.0 + 0j), 0.5, 0.0, omega0=0.7, k0=0.7**2 / 9.81)
    >>> q, dt = scaled_envelope(wave)
    >>> round(float(q[0].real * np.sqrt(2) / wave.k0), 12), dt
    (2.0, 0.35)
    """
    return np.conj(envelope.values) * envelope_scale(envelope), envelope.dt * envelope.omega0


def envelope_scale(envelope: Envelope) -> float:
    """|q| per metre of envelope amplitude [1/m], the factor of `scaled_envelope`.

    >>> wave = Envelope(np.zeros(4), 0.5, 0.0, omega0=0.7, k0=0.7**2 / 9.81)
    >>> bool(np.isclose(envelope_scale(wave), wave.k0 / np.sqrt(2)))
    True
    """
    kh = envelope.k0 * envelope.depth
    cubic = nonlinear_coefficient(kh) * envelope.k0**3 / (2 * group_ratio(kh) * np.tanh(kh))
    return float(np.sqrt(max(float(cubic), 0.0) / (_curvature(envelope) * envelope.omega0**2)))


def _checked(q, dt, floor=0.02):
    q = np.asarray(q, complex)
    if q.ndim != 1 or q.size < 2:
        raise InputError(f"q must be one row of at least 2 samples, got shape {q.shape}")
    if not np.isfinite(q).all():
        raise InputError("q holds NaN or infinite values; gaps must be treated before")
    if not (np.isfinite(dt) and dt > 0):
        raise InputError(f"dt must be a positive scaled step omega0 dt, got {dt!r}")
    if np.abs(q).max() * dt > 1:
        raise InputError(
            f"max |q| dt is {np.abs(q).max() * dt:.3g} and must not exceed 1: q and dt are the "
            "values of scaled_envelope, not metres and seconds, and dt must resolve q"
        )
    if not 0 < floor < 1:
        raise InputError(f"floor must lie between 0 and 1 (share of max |q|), got {floor!r}")
    return q


def discrete_spectrum(q, dt, *, floor=0.02, order=6) -> np.ndarray:
    """Eigenvalues of the Zakharov-Shabat problem with q = 0 outside the samples, certified.

    Parameters
    ----------
    q : (n,) complex array
        Scaled envelope (`scaled_envelope`), band limited; each sample stands for the middle of
        its step.
    dt : float
        Scaled step omega0 dt, **not seconds**.
    floor : float
        Eigenvalues with Im below this share of max |q| are not looked for.
    order : {2, 4, 6, 8}
        Order of the integration in dt.

    Returns
    -------
    (m,) complex array
        All zeros of a(lambda) with Im lambda above floor max|q| and |Re lambda| inside the band of
        the signal, multiple ones repeated, largest imaginary part first.

    Raises
    ------
    InputError
        For an array or step that cannot be used.
    NumericsError
        If the zeros found do not number as many as the argument principle counts; `.achieved`
        holds those found.

    Notes
    -----
    exp(h(L + Q)) of each step is split as exp(hL/2) exp(hQ) exp(hL/2) (Strang 1968), L the
    diagonal part, which makes the transfer matrix a polynomial in exp(2 i lambda h), multiplied
    out by a product tree with fast Fourier transforms (Wahls & Poor 2015, IEEE Trans. Inf. Theory
    61, sec. IV).  The splitting is symmetric, so Richardson extrapolation over h = dt, dt/2, ..,
    dt/(order/2) on the band-limited interpolant raises the order by two each (Chimmalgi, Prins &
    Wahls 2019, IEEE Access 7, sec. V).  Zeros start from cells of a grid around which arg a turns
    and are polished together (`_polish`).

    Examples
    --------
    q = 2.3 sech T has the eigenvalues 1.8 i and 0.8 i (Satsuma & Yajima 1974):

    >>> t = np.arange(-16, 16, 0.1) + 0.05
    >>> np.round(discrete_spectrum(2.3 / np.cosh(t), 0.1, order=8).imag, 8)
    array([1.8, 0.8])
    """
    q = _checked(q, dt, floor)
    return _eigenvalues(_levels(q[None], order), dt, floor)[0]


def _levels(q, order):
    if order not in _ORDERS:
        raise InputError(f"order must be one of {_ORDERS}, got {order!r}")
    return {parts: _substeps(q, parts) for parts in range(1, order // 2 + 1)}


def _joined(q, dt, eigenvalues, order):
    """(log b, scaled time of the eigenfunction's centroid) of each eigenvalue.

    Solutions from the left and from the right are known at the cuts between pieces of the record
    and joined at the cut where they agree best, because each decays towards its far end only in
    exact arithmetic (Hari & Kschischang 2016, J. Lightwave Technol. 34, sec. III).
    """
    q = _checked(q, dt)
    if q.size < 2 * _LEAF:
        raise InputError(f"q needs at least {2 * _LEAF} samples, got {q.size}")
    lam = np.atleast_1d(np.asarray(eigenvalues, complex))
    if not (lam.imag > 0).all():
        raise InputError("eigenvalues must lie in the upper half plane")
    if lam.size == 0:
        return np.empty(0, complex), np.empty(0)
    function = _Jost(_levels(q[None], order), dt, least_pieces=128)
    pairs = function.entries_at(np.zeros(lam.size, int), lam)
    entries = sum(w * entries for w, (entries, _) in zip(function.weights, pairs, strict=True))
    left = [entries[0, :2]]
    for m in entries[1:-1]:
        left.append(_apply(m, left[-1]))
    right = [entries[-1, [0, 2]]]
    for m in entries[-2:0:-1]:
        r = right[-1]
        right.append(np.stack([r[0] * m[0] + r[1] * m[1], r[0] * m[2] + r[1] * m[3]]))
    left, right = np.array(left), np.array(right[::-1])  # (cuts, 2, m)
    size_left, size_right = np.linalg.norm(left, axis=1), np.linalg.norm(right, axis=1)
    misfit = np.abs((left * right).sum(axis=1)) / (size_left * size_right)
    best = np.argmin(misfit, axis=0)
    pick = np.arange(lam.size)
    v, r = left[best, :, pick], right[best, :, pick]
    # at the cut v is along (-r2, r1); the determinant of the rest is z^(cells to the right)
    along = (np.conj(r[:, 0]) * v[:, 1] - np.conj(r[:, 1]) * v[:, 0]) / size_right[best, pick] ** 2
    end = (q.size - 0.5) * dt
    cut = end - function.padded * dt * np.arange(function.pieces - 1, 0, -1) / function.pieces
    log_b = np.log(along) - 2j * lam * cut[best]
    # |eigenfunction| at the cuts, the left solution up to the joint, the right one behind it
    with np.errstate(divide="ignore"):
        growth = lam.imag * cut[:, None]
        before = np.log(size_left) + growth
        after = np.log(size_right) + log_b.real - growth
    size = np.where(np.arange(cut.size)[:, None] <= best, before, after)
    weight = np.exp(2 * (size - size.max(axis=0)))
    return log_b, (weight * cut[:, None]).sum(axis=0) / weight.sum(axis=0)


def log_norming_constants(q, dt, eigenvalues, *, order=6) -> np.ndarray:
    """Logarithms of the norming constants b of eigenvalues of q.

    Parameters
    ----------
    q, dt, order
        As for `discrete_spectrum`; time runs from the first sample.
    eigenvalues : (m,) complex array
        From `discrete_spectrum` of the same q with the same order.

    Returns
    -------
    (m,) complex array
        log b (b itself overflows in long records): the solution that is (exp(-i l T), 0) before
        the packet is (0, b exp(i l T)) after it.

    Raises
    ------
    InputError
        For an array or step that cannot be used or eigenvalues not in the upper half plane.

    Examples
    --------
    >>> t = np.arange(0, 80, 0.1)
    >>> q = 1 / np.cosh(t - 30)
    >>> log_b = log_norming_constants(q, 0.1, discrete_spectrum(q, 0.1))
    >>> np.round(soliton_positions([0.5j], log_b), 6)
    array([30.])
    """
    return _joined(q, dt, eigenvalues, order)[0]


def eigenvalue_locations(q, dt, eigenvalues, *, order=6) -> np.ndarray:
    """Scaled time from the first sample of the centroid of each eigenvalue's eigenfunction.

    Where in a record an eigenvalue lives, also in a crowd: the group that carries it.  Resolution
    1/128 of the record.  Parameters as for `log_norming_constants`.

    >>> t = np.arange(0, 80, 0.1)
    >>> q = 1 / np.cosh(t - 30)
    >>> bool(abs(eigenvalue_locations(q, 0.1, [0.5j])[0] - 30) < 0.3)
    True
    """
    return _joined(q, dt, eigenvalues, order)[1]


def soliton_positions(eigenvalues, log_norming) -> np.ndarray:
    """Scaled time of each soliton from the first sample: log |b| / (2 Im l).

    Exact for one soliton.  Others shift the value by their pair shifts
    log |(l - m*)/(l - m)| / (2 Im l), earlier ones to later times: a place for large, well
    separated solitons, not for a crowd of small ones (Zakharov & Shabat 1972).

    >>> soliton_positions([0.5j], [3.0 + 0j])
    array([3.])
    """
    eigenvalues = np.asarray(eigenvalues, complex)
    return np.asarray(log_norming).real / (2 * eigenvalues.imag)


def continuous_energy(q, dt, *, order=6) -> float:
    """Part of int |q|^2 dT carried by dispersive waves, (1/pi) int -ln |a(xi)|^2 d xi.

    Parameters
    ----------
    q, dt, order
        As for `discrete_spectrum`.

    Returns
    -------
    float
        With the solitons' 4 sum Im l it adds up to int |q|^2 dT (trace formula; Faddeev &
        Takhtajan 1987, ch. I, eq. 7.17).  Eigenvalues under the floor of `discrete_spectrum` are
        in neither.

    Examples
    --------
    >>> t = np.arange(-20, 20, 0.1) + 0.05
    >>> round(continuous_energy(0.4 / np.cosh(t), 0.1), 4)
    0.32
    """
    q = _checked(q, dt)
    function = _Jost(_levels(q[None], order), dt)
    # beyond the band of the signal the integrand is rounding, and the extrapolation worst
    peak = np.abs(q).max(keepdims=True)
    band = _side(q[None], dt, 1e-15 * (np.abs(q) ** 2).sum() * dt * np.ones(1), peak)
    columns = _fast_size(16 * q.size)
    half = int(band * columns * dt / np.pi)
    a = function.on_lines(np.zeros((1, 1)), columns, half, np.arange(1), len(function.parts))
    density = -2 * np.log(np.maximum(np.abs(a[0, 0]), 1e-300))
    return float(density.sum() / (columns * dt))


def periodic_spectrum(q, dt, *, floor=0.02, order=6) -> np.ndarray:
    """Main spectrum in the upper half plane of q repeated periodically (finite-gap view).

    Parameters
    ----------
    q : (n,) complex array
        One period; the sample after the last is the first again.
    dt, floor, order
        As for `discrete_spectrum`.

    Returns
    -------
    (m,) complex array
        All l with Im l above floor max|q| where the trace of the monodromy matrix is +2 or -2,
        double points twice, largest imaginary part first.  Simple points end bands; a double
        point is an unstable mode of the train at rest.  Points nearer to the real axis than about
        pi/20 over the length are not looked for: they belong to waves as good as linear.

    Raises
    ------
    InputError, NumericsError
        As `discrete_spectrum`; certified in the same way.

    Notes
    -----
    A record is not periodic: joining its ends makes one artificial group.  Sources: Ma & Ablowitz
    (1981), Stud. Appl. Math. 65; Tracy & Chen (1988), Phys. Rev. A 37.

    Examples
    --------
    A plane wave of height A on length L has its band end at i A and double points at
    l^2 = (n pi/L)^2 - A^2:

    >>> spectrum = periodic_spectrum(np.ones(64), 5 / 64)
    >>> np.round(spectrum.imag, 4), round(float(np.sqrt(1 - (np.pi / 5) ** 2)), 4)
    (array([1.   , 0.778, 0.778]), 0.778)
    """
    q = _checked(q, dt, floor)
    if order not in _ORDERS:
        raise InputError(f"order must be one of {_ORDERS}, got {order!r}")
    area = 1.1 * np.abs(q).sum() * dt
    # a length that is cut into pieces without a gap between the periods
    n = _halved_length(q.size, 2 ** int(np.ceil(np.log2(max(64, area / _PIECE_AREA)))))
    dt = dt * q.size / n
    parts = range(1, order // 2 + 1)
    levels = {m: _resampled(q, n * m, (1 / m - 1) / (2 * n))[None] for m in parts}
    peak = _peak(levels)
    if peak[0] == 0:
        return np.empty(0, complex)
    found = [_zeros(_Floquet(levels, dt, sign=s), levels, peak, floor)[0] for s in (1, -1)]
    spectrum = np.concatenate(found)
    return spectrum[np.argsort(-spectrum.imag, kind="stable")]


def _resampled(q, n, shift=0.0):
    """Periodic q at n >= q.size points a period, the first `shift` periods after its first."""
    m = q.size
    index = np.fft.fftfreq(m, 1 / m).astype(int)
    spectrum = np.fft.fft(q) * (n / m)
    wide = np.zeros(n, complex)
    wide[index] = spectrum
    if m % 2 == 0 and n > m:  # the Nyquist component belongs half to either sign
        wide[[-m // 2, m // 2]] = spectrum[m // 2] / 2
    return np.fft.ifft(wide * np.exp(2j * np.pi * np.fft.fftfreq(n, 1 / n) * shift))


def _cut(levels, first, length, taper):
    """Windows of `length` samples from sample `first` (w,) (may reach outside: zero), tapered.

    `taper` maps the mid-points (length parts,) in samples from the window's start to weights.
    """
    cut = {}
    for parts, q in levels.items():
        n = q.shape[-1]
        index = first[:, None] * parts + np.arange(length * parts)
        values = q[0][np.clip(index, 0, n - 1)]
        values[(index < 0) | (index >= n)] = 0
        cut[parts] = values * taper((np.arange(length * parts) + 0.5) / parts)
    return cut


def _rise(x):
    """Half a cosine from 0 at x <= 0 to 1 at x >= 1."""
    return 0.5 - 0.5 * np.cos(np.pi * np.clip(x, 0, 1))


def _windows(q, dt, centres, half_width, floor, weight):
    """Scaled times of the middles of windows, and their samples for the fourth order.

    `weight` maps places in a window, 0 to 1 from end to end, to the weight of q.
    """
    q = _checked(q, dt, floor)
    centres = np.atleast_1d(np.asarray(centres, float))
    length = max(4, round(2 * half_width / dt))
    first = np.rint(centres / dt - length / 2 + 0.5).astype(int)
    levels = _cut(_levels(q[None], 4), first, length, lambda position: weight(position / length))
    return (first + (length - 1) / 2) * dt, levels


@dataclass(frozen=True, slots=True, eq=False)
class WindowedContent:
    """Scattering content of m windows of one record; every field an (m,) array, scaled units.

    Parameters
    ----------
    largest, largest_re : (m,) arrays
        Im and Re of the eigenvalue with the largest imaginary part (0: none).
    count, sum_im, sum_im2 : (m,) arrays
        Number of eigenvalues, sum of Im and of Im^2.
    energy_share : (m,) array
        4 sum Im over the integral of |q|^2 of the window: the solitons' share (trace formula).
    chirp : (m,) array
        d^2 phase/dT^2 of q about the window's main peak; negative chirps focus downwave.
    focus_distance : (m,) array
        Scaled X downwave at which the main group is expected to focus; NaN if it does not.
    amplification : (m,) array
        Expected peak there over the peak now, >= 1.
    """

    largest: np.ndarray
    largest_re: np.ndarray
    count: np.ndarray
    sum_im: np.ndarray
    sum_im2: np.ndarray
    energy_share: np.ndarray
    chirp: np.ndarray
    focus_distance: np.ndarray
    amplification: np.ndarray


def windowed_content(q, dt, centres, *, half_width=12 * np.pi, floor=0.02) -> WindowedContent:
    """Scattering content of windows of one width about any centres of a record.

    Parameters
    ----------
    q : (n,) complex array
        Scaled envelope of the record.
    dt : float
        Scaled step omega0 dt, not seconds.
    centres : (m,) array
        Scaled time from the first sample; windows may reach outside the record (q = 0 there).
    half_width : float
        Scaled; the default is 6 carrier periods each side.  The outer eighth on each side is
        tapered by half a cosine.
    floor : float
        As in `discrete_spectrum`.

    Returns
    -------
    WindowedContent

    Raises
    ------
    InputError, NumericsError
        As `discrete_spectrum`, whose fourth-order path and certificate this uses.

    Examples
    --------
    >>> t = np.arange(0, 200, 0.5)
    >>> q = 0.2 / np.cosh(0.2 * (t - 100))
    >>> content = windowed_content(q, 0.5, [30.0, 100.0])
    >>> content.count.tolist(), np.round(content.largest, 2).tolist()
    ([0, 1], [0.0, 0.1])
    """
    _, levels = _windows(
        q, dt, centres, half_width, floor, lambda x: _rise(8 * x) * _rise(8 - 8 * x)
    )
    eigenvalues = _eigenvalues(levels, dt, floor)
    imaginary = [x.imag for x in eigenvalues]
    energy = (np.abs(levels[1]) ** 2).sum(axis=1) * dt
    sum_im = np.array([x.sum() for x in imaginary])
    focus = focusing(levels[1], dt)
    return WindowedContent(
        largest=np.array([x[0] if x.size else 0.0 for x in imaginary]),
        largest_re=np.array([x[0].real if x.size else 0.0 for x in eigenvalues]),
        count=np.array([x.size for x in imaginary]),
        sum_im=sum_im,
        sum_im2=np.array([(x**2).sum() for x in imaginary]),
        energy_share=np.divide(4 * sum_im, energy, out=np.zeros_like(energy), where=energy > 0),
        chirp=focus.chirp,
        focus_distance=focus.distance,
        amplification=focus.amplification,
    )


@dataclass(frozen=True, slots=True, eq=False)
class WindowedEnergy:
    """How the energy of m windows of one record is spread over speeds, in scaled units.

    Parameters
    ----------
    centre : (m,) array
        Scaled time of each window's middle from the first sample.
    speed : (s,) array
        dT/dX, evenly spaced: by how much scaled time energy arrives later, per scaled distance,
        than energy at the carrier's group speed.
    energy : (m, s) array
        Part of each window's integral of |q|^2 dT near each speed.
    """

    centre: np.ndarray
    speed: np.ndarray
    energy: np.ndarray


def windowed_energy(q, dt, centres, *, half_width, floor=0.02) -> WindowedEnergy:
    """Energy of windows of a record by the speed at which the scattering spectrum moves it.

    Parameters
    ----------
    q : (n,) complex array
        Scaled envelope of the record.
    dt : float
        Scaled step omega0 dt, not seconds.
    centres : (m,) array
        Scaled time from the first sample, met to half a step; windows may reach outside the
        record (q = 0 there).
    half_width : float
        Scaled.  q is weighted with 1 at the centre, falling by half a cosine to 0 at both ends.
    floor : float
        As in `discrete_spectrum`.

    Returns
    -------
    WindowedEnergy

    Raises
    ------
    InputError, NumericsError
        As `discrete_spectrum`, whose fourth-order path and certificate this uses.

    Notes
    -----
    By the trace formula (Faddeev & Takhtajan 1987, ch. I, eq. 7.17) the integral of |q|^2 is
    (1/pi) int -ln |a(xi)|^2 d xi of dispersive waves and 4 Im l of each eigenvalue l.  In the
    evolution downwave the first move at dT/dX = -4 xi, a soliton at -4 Re l: where the phases of
    the waves are left out this says when energy arrives.  For small q it is the short-time
    spectrum at the group speeds of linear deep water, which dT/dX = -4 xi holds exactly.
    Eigenvalues under the floor are in neither part.

    Examples
    --------
    A soliton that is slower than the carrier:

    >>> t = np.arange(0, 400, 0.5)
    >>> q = 0.2 / np.cosh(0.2 * (t - 200)) * np.exp(0.1j * t)
    >>> found = windowed_energy(q, 0.5, [200.0], half_width=200)
    >>> total = found.energy[0].sum()
    >>> round(float(total), 2), round(float(found.energy[0] @ found.speed / total), 2)
    (0.4, 0.2)
    """
    middle, levels = _windows(
        q, dt, centres, half_width, floor, lambda x: _rise(2 * x) * _rise(2 - 2 * x)
    )
    columns = _fast_size(4 * levels[1].shape[1])
    half, step = columns // 2, np.pi / (columns * dt)
    energy = np.zeros((middle.size, 2 * half + 1))
    peak = _peak(levels)
    live = np.flatnonzero(peak > 0)
    if live.size:
        levels = {parts: values[live] for parts, values in levels.items()}
        function = _Jost(levels, dt)
        axis = np.zeros((live.size, 1))
        a = function.on_lines(axis, columns, half, np.arange(live.size), len(levels))[:, 0]
        # |a| <= 1 on the real axis; rounding and extrapolation may exceed it beyond the signal
        energy[live] = -2 / np.pi * step * np.log(np.clip(np.abs(a), 1e-300, 1.0))
        for row, zeros in zip(live, _zeros(function, levels, peak[live], floor), strict=True):
            place = np.clip(zeros.real / step + half, 0, 2 * half)
            low = np.minimum(place.astype(int), 2 * half - 1)
            np.add.at(energy[row], low, 4 * zeros.imag * (low + 1 - place))
            np.add.at(energy[row], low + 1, 4 * zeros.imag * (place - low))
    return WindowedEnergy(middle, -4 * step * np.arange(-half, half + 1), energy)


@dataclass(frozen=True, slots=True, eq=False)
class Focusing:
    """Where groups are expected to focus downwave; every field a (w,) array in scaled units.

    Parameters
    ----------
    chirp : (w,) array
        d^2 phase/dT^2 of q about the main peak; negative focuses downwave.
    speed : (w,) array
        dT/dX of the group: twice its mean frequency offset.
    nonlinearity : (w,) array
        A tau of the sech of equal peak and width: the number of solitons it would split into.
    parabola_distance, parabola_amplification : (w,) arrays
        From the chirped-group parabola; NaN and 1 where the group spreads from the start.
    catastrophe_distance, catastrophe_amplification : (w,) arrays
        From the semiclassical estimate; NaN and 1 where that does not focus.
    distance, amplification : (w,) arrays
        The semiclassical ones where `nonlinearity` >= 1.5, else the parabola's.
    """

    chirp: np.ndarray
    speed: np.ndarray
    nonlinearity: np.ndarray
    parabola_distance: np.ndarray
    parabola_amplification: np.ndarray
    catastrophe_distance: np.ndarray
    catastrophe_amplification: np.ndarray
    distance: np.ndarray
    amplification: np.ndarray


# First peak of A sech with N = A tau over its semiclassical limit 3 A sqrt(mu + 2).  Origin:
# fourth-order split-step runs of i u_t + (e^2/2) u_xx + |u|^2 u = 0, e = 1/N; N = 1 and 2 exact.
_PEAK_N = (1.0, 2.0, 3.0, 5.0, 10.0, 20.0, 40.0)
_PEAK_SHARE = (0.2357, 0.4714, 0.5866, 0.7038, 0.8176, 0.8905, 0.9352)


def focusing(q, dt) -> Focusing:
    """Focusing distance and amplification of the main group of each row.

    Parameters
    ----------
    q : (w, n) complex array
        Scaled envelopes, one group (window) a row.
    dt : float
        Scaled step omega0 dt, not seconds.

    Returns
    -------
    Focusing

    Notes
    -----
    Width and chirp kappa are moments weighted with |q|^4, so that neighbours of the main group
    count little.

    Parabola: for the Gaussian A exp(-alpha T^2 + i kappa T^2/2) the variance V of |q|^2 starts as
    V0 + V1 X + V2 X^2/2 with V0 = 1/(4 alpha), V1 = 4 kappa V0 and, from the virial identity,
    V2 = 8 alpha + 2 kappa^2/alpha - 2 sqrt(2) A^2; its minimum is the focus and (V0/V)^(1/4) the
    amplification.  Exact for a Gaussian without nonlinearity (V is a parabola).

    Semiclassical: A sech(T/tau) with phase curvature -mu A/tau at its centre has its gradient
    catastrophe at tau/(2A) / (mu + 2) and its first peak (2.1985/2)(mu + 2)^(-6/5) e^(4/5) tau/A
    later, e = 1/(A tau) (Tovbis, Venakides & Zhou 2004; Bertola & Tovbis 2013); amplitude
    3 A sqrt(mu + 2) times a finite-N factor.  Leading order in e: for N = A tau = 5 the first
    peak comes 10 % later than said, for N = 2 half as far again.

    In random seas of realistic breadth neighbours interfere: over 1800 groups of JONSWAP seas
    (gamma 3.3, steepness 0.05 to 0.12, cubic evolution; benchmarks/bench_scattering.py) the rank
    correlation of the chirp with the growth of the group is 0.2 after 5 wavelengths and below 0.1
    from 10 on.  Features for a model that knows how little they say, not forecasts.

    Examples
    --------
    A chirped linear Gaussian focuses at -kappa/(8 (alpha^2 + kappa^2/4)):

    >>> t = np.arange(-100, 100, 0.125)
    >>> q = 1e-6 * np.exp((-0.005 - 0.01j) * t**2)
    >>> round(float(focusing(q[None], 0.125).distance[0]), 2)
    20.0
    """
    q = np.asarray(q, complex)
    if q.ndim != 2 or q.shape[1] < 3:
        raise InputError(f"q must be rows of at least 3 samples, got shape {q.shape}")
    power = np.abs(q) ** 2
    weight = power**2
    total = weight.sum(axis=1)
    alive = total > 0
    safe = np.where(alive, total, 1.0)
    time = dt * np.arange(q.shape[1])
    t = time - ((weight * time).sum(axis=1) / safe)[:, None]
    variance = np.where(alive, (weight * t**2).sum(axis=1) / safe, 1.0)
    flux = power * (np.conj(q) * np.gradient(q, dt, axis=1)).imag
    frequency = flux.sum(axis=1) / safe
    chirp = ((flux - frequency[:, None] * weight) * t).sum(axis=1) / (safe * variance)
    peak = np.sqrt(power.max(axis=1))

    alpha = 1 / (8 * variance)
    v0, v1 = 1 / (4 * alpha), chirp / alpha
    v2 = 8 * alpha + 2 * chirp**2 / alpha - 2 * np.sqrt(2) * peak**2
    converges = alive & (chirp < 0)
    opens = v2 * v0 > v1**2 / 2 * (1 + 1e-9)  # minimum above zero
    bottom = -v1 / np.where(opens, v2, 1.0)
    # a parabola that reaches zero has no minimum to speak of: the steepest descent instead
    straight = -v0 / np.where(converges, v1, -1.0)
    parabola = np.where(converges, np.where(opens, bottom, straight), np.nan)
    least = np.where(opens, v0 + v1 * bottom / 2, v0 / _PARABOLA_LIMIT)
    parabola_gain = np.where(converges, np.minimum(v0 / least, _PARABOLA_LIMIT) ** 0.25, 1.0)

    tau = np.sqrt(variance / (np.pi**2 / 12 - 0.5))  # variance of sech^4
    area = peak * tau
    some = np.where(alive, area, 1.0)
    strength = 2 - chirp * tau**2 / some
    focuses = alive & (strength > 0)
    rate = np.where(focuses, strength, 1.0)
    share = np.interp(np.log(some), np.log(_PEAK_N), _PEAK_SHARE)
    share = np.where(some < 1, _PEAK_SHARE[0] * some, share)
    gain = 3 * np.sqrt(rate) * share
    focuses &= gain > 1
    catastrophe = tau**2 / (2 * some) * (1 / rate + 2.1985 * rate**-1.2 * some**-0.8)
    catastrophe = np.where(focuses, catastrophe, np.nan)
    gain = np.where(focuses, gain, 1.0)
    strong = area >= 1.5
    return Focusing(
        chirp=chirp,
        speed=2 * frequency,
        nonlinearity=area,
        parabola_distance=parabola,
        parabola_amplification=parabola_gain,
        catastrophe_distance=catastrophe,
        catastrophe_amplification=gain,
        distance=np.where(strong, catastrophe, parabola),
        amplification=np.where(strong, gain, parabola_gain),
    )


def segment_groups(envelope: Envelope) -> tuple[tuple[int, int], ...]:
    """Wave groups of a record, cut at the minima of its smoothed envelope.

    Parameters
    ----------
    envelope : Envelope
        values (n,) [m].

    Returns
    -------
    tuple of (first, stop)
        Sample ranges, in order of time, of the groups that rise above the record's rms envelope.

    Notes
    -----
    |A|^2 is smoothed by a Gaussian of half a carrier period standard deviation.  Neighbouring
    groups are joined, shallowest gap first, while the envelope between them stays above
    0.6 of the lower of their peaks (common practice, no source).

    Examples
    --------
    >>> t = np.arange(0, 200, 0.5)
    >>> a = 1 / np.cosh(0.2 * (t - 60)) + 1 / np.cosh(0.2 * (t - 140))
    >>> segment_groups(Envelope(a, 0.5, 0.0, omega0=1.0, k0=1 / 9.81))
    ((0, 200), (200, 400))
    """
    if envelope.values.ndim != 1:
        raise InputError(f"one record at a time, got an envelope of shape {envelope.values.shape}")
    width = np.pi / envelope.omega0 / envelope.dt
    reach = max(1, int(4 * width))
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / width) ** 2)
    power = np.abs(envelope.values) ** 2
    n = power.size
    if n <= 2 * reach:
        return ((0, n),) if power.any() else ()
    smooth = np.convolve(power, kernel, "same") / np.convolve(np.ones(n), kernel, "same")
    smooth = np.sqrt(smooth)
    inner = np.arange(1, n - 1)
    low = inner[(smooth[1:-1] < smooth[:-2]) & (smooth[1:-1] <= smooth[2:])]
    bounds = [0, *low.tolist(), n]
    peaks = [float(smooth[i:j].max()) for i, j in itertools.pairwise(bounds)]
    while len(peaks) > 1:
        depth = [
            smooth[bounds[i + 1]] / min(peaks[i], peaks[i + 1])
            if min(peaks[i : i + 2]) > 0
            else 1.0
            for i in range(len(peaks) - 1)
        ]
        i = int(np.argmax(depth))
        if depth[i] < 0.6:
            break
        peaks[i : i + 2] = [max(peaks[i : i + 2])]
        del bounds[i + 1]
    level = np.sqrt(power.mean())
    ranges = itertools.pairwise(bounds)
    return tuple(r for r, peak in zip(ranges, peaks, strict=True) if peak > level)


def group_content(envelope: Envelope) -> tuple[WaveGroup, ...]:
    """The wave groups of a record and what the scattering spectrum says of each.

    Parameters
    ----------
    envelope : Envelope
        values (n,) [m].

    Returns
    -------
    tuple of WaveGroup
        In order of time.  Windows are those of `segment_groups`, each edge tapered over one
        carrier period on either side of the minimum, so that neighbours overlap.

    Raises
    ------
    InputError, NumericsError
        As `discrete_spectrum`.

    Notes
    -----
    The eigenvalues describe the group cut out of the record now; they are not invariant as it
    travels on, because waves of other speed enter and leave it.

    Examples
    --------
    >>> t = np.arange(0, 400, 0.5)
    >>> wave = Envelope(1 / np.cosh((t - 200) / 20), 0.5, 0.0, omega0=1.0, k0=0.1)
    >>> [np.round(g.eigenvalues.imag, 3).tolist() for g in group_content(wave)]
    [[0.046]]
    """
    groups = segment_groups(envelope)
    if not groups:
        return ()
    q, dt = scaled_envelope(envelope)
    q = _checked(q, dt)
    start, stop = np.array(groups).T
    edge = 2 * np.pi / dt
    length = int(np.max(stop - start) + 2 * np.ceil(edge))
    first = start + (stop - start - length) // 2
    lead = (start - first)[:, None]
    tail = (stop - first)[:, None]

    def taper(position):
        rising = _rise((position - lead) / (2 * edge) + 0.5)
        return rising * _rise((tail - position) / (2 * edge) + 0.5)

    levels = _cut(_levels(q[None], 4), first, length, taper)
    eigenvalues = _eigenvalues(levels, dt, 0.02)
    focus = focusing(levels[1], dt)
    distance = focus.distance * evolution_scale(envelope)
    travel = distance / float(group_velocity(envelope.omega0, envelope.depth))
    travel = travel + focus.speed * focus.distance / envelope.omega0
    energy = (np.abs(levels[1]) ** 2).sum(axis=1) * dt
    times, height = envelope.times, 2 * np.abs(envelope.values)
    content = []
    for i, (left, right) in enumerate(groups):
        peak = left + int(np.argmax(height[left:right]))
        content.append(
            WaveGroup(
                start=float(times[left]),
                end=float(times[right - 1]),
                peak_time=float(times[peak]),
                height=float(height[peak]),
                eigenvalues=eigenvalues[i],
                soliton_share=float(4 * eigenvalues[i].imag.sum() / energy[i])
                if energy[i]
                else 0.0,
                chirp=float(focus.chirp[i] * envelope.omega0**2),
                focus_distance=float(distance[i]),
                focus_time=float(times[peak] + travel[i]),
                amplification=float(focus.amplification[i]),
            )
        )
    return tuple(content)
