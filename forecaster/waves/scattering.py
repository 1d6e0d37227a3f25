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
from forecaster.waves.linear import GRAVITY, group_ratio, nonlinear_coefficient

_LEAF = 16  # shortest run of samples that is multiplied out directly
_BLOCK_AREA = 12.0  # largest integral of |q| over one block: about four eigenvalues
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


def _transfer_polynomials(q, step, blocks):
    """Split-step transfer matrices of `blocks` equal pieces of each row of q (w, n), n = blocks p.

    Returns (2, w, blocks, p): the coefficients a_k, b_k of the first column of
    Q_p W Q_(p-1) W ... Q_1, W = diag(1, z), z = exp(2 i lambda step); Q the exponential of the
    potential over one step.
    """
    rows, n = q.shape
    length = n // blocks
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
    while values.shape[2] < length:
        m = values.shape[2]
        odd = np.fft.fft(np.fft.ifft(values) * np.exp(-1j * np.pi * np.arange(m) / m))
        product = np.empty((2, values.shape[1] // 2, 2 * m), complex)
        for part, sign, at in ((0, 1, values), (1, -1, odd)):
            (a_left, a_right), (b_left, b_right) = ((x[0::2], x[1::2]) for x in at)
            product[0, :, part::2] = a_right * a_left - sign * np.conj(b_right) * b_left
            product[1, :, part::2] = b_right * a_left + sign * np.conj(a_right) * b_left
        values = product
    return np.fft.ifft(values).reshape(2, rows, blocks, length)


def _extrapolation(parts):
    """Richardson weights that remove step^2, step^4, ... for steps dt/parts."""
    squares = np.array(parts, float) ** 2
    return [np.prod([s / (s - other) for other in squares if other != s]) for s in squares]


class _Scattering:
    """Transfer matrices of the rows of a potential as polynomials, cut into blocks.

    Each block's matrix, exp(-i lambda length) set apart, is [[A, C], [B, D]] with
    A = sum a_k z^k, B = sum b_k z^(k+1/2), C = -sum conj(b_(n-1-k)) z^(k+1/2),
    D = sum conj(a_(n-1-k)) z^(k+1); all are bounded in the upper half plane.  The blocks are
    short enough that |A| of one block stays far above rounding although a(lambda) of a long
    record, their product, may be smaller than rounding.
    """

    def __init__(self, levels, dt):
        """levels: {parts: (w, n parts) samples}, n the same for all."""
        self.dt = dt
        first = levels[min(levels)]
        self.rows = first.shape[0]
        area = np.abs(first).sum(axis=1).max(initial=0) * dt / min(levels)
        self.n = first.shape[1] // min(levels)
        self.blocks = 2 ** max(0, int(np.ceil(np.log2(max(area, 1e-9) / _BLOCK_AREA))))
        self.blocks = min(self.blocks, max(1, self.n // _LEAF))
        unit = self.blocks
        while self.n / unit > 2 * _LEAF:
            unit *= 2
        padded = -(-self.n // unit) * unit
        self.parts = tuple(levels)
        self.weights = _extrapolation(self.parts)
        self.polynomials = []
        for parts, q in levels.items():
            # zeros in front change neither a nor b
            filled = np.zeros((self.rows, padded * parts), complex)
            filled[:, padded * parts - q.shape[1] :] = q
            a, b = _transfer_polynomials(filled, dt / parts, self.blocks)
            if self.blocks == 1:
                entries = a[None]
            else:
                entries = np.stack([a, b, -np.conj(b[..., ::-1]), np.conj(a[..., ::-1])])
            self.polynomials.append(np.moveaxis(entries, 0, 2))  # (w, blocks, 1 or 4, length)

    def on_lines(self, eta, columns, half, rows, levels):
        """a at xi_j + i eta, xi_j = pi j/(columns dt), |j| <= half; eta (w, r) -> (w, r, 2 half+1).

        Only the first `levels` polynomials are used: with 1 a cheap, second-order value.
        """
        weights = _extrapolation(self.parts[:levels])
        turn = np.exp(1j * np.pi / columns * np.arange(-half, half + 1))
        result = np.empty((rows.size, eta.shape[1], 2 * half + 1), complex)
        for line in range(eta.shape[1]):
            depth = self.dt * eta[:, line, None, None, None]
            entries = 0
            for parts, weight, polynomial in zip(
                self.parts, weights, self.polynomials, strict=False
            ):
                size = columns * parts
                decay = np.exp(-2 / parts * depth * np.arange(polynomial.shape[3]))
                if rows.size < self.rows:
                    polynomial = polynomial[rows]
                values = np.fft.ifft(polynomial * decay, size)
                values = np.concatenate(
                    [values[..., size - half :], values[..., : half + 1]], axis=-1
                )
                values *= weight * size
                if self.blocks > 1:
                    shift = np.exp(-depth[:, :, 0] / parts) * turn ** (1 / parts)
                    values[:, :, 1] *= shift
                    values[:, :, 2] *= shift
                    values[:, :, 3] *= shift * shift
                entries = entries + values
            result[:, line] = self._chain(np.moveaxis(entries, 3, 0))[..., 0].T
        return result

    def _chain(self, entries):
        """Product of the blocks, (..., blocks, entries) -> (..., 2): a and, times z^(1/2), b."""
        state = entries[..., 0, :2]
        for k in range(1, self.blocks):
            m11, m21, m12, m22 = np.moveaxis(entries[..., k, :], -1, 0)
            a, b = state[..., 0], state[..., 1]
            state = np.stack([m11 * a + m12 * b, m21 * a + m22 * b], axis=-1)
        return state

    def at(self, row, lam):
        """a and da/dlambda at points lam (g,) of rows row (g,)."""
        value = slope = 0
        for parts, weight, polynomial in zip(
            self.parts, self.weights, self.polynomials, strict=True
        ):
            # Horner's rule in two stages: z^(outer + inner)
            exponent = 2j * self.dt / parts
            length = polynomial.shape[3]
            width = next(w for w in range(int(np.sqrt(length)), 0, -1) if length % w == 0)
            inner, outer = np.arange(width), np.arange(0, length, width)
            low = np.exp(exponent * lam[:, None] * inner)
            low = np.stack([low, low * inner], axis=-1)
            high = weight * np.exp(exponent * lam[:, None] * outer)[:, None, None, :]
            folded = polynomial.reshape(*polynomial.shape[:3], -1, width)
            if self.rows == 1:
                sums = np.tensordot(low, folded[0], (1, 3))  # one product for all points
                here_sum, there_sum = sums[:, 0], sums[:, 1]
            else:
                sums = folded[row] @ low[:, None, None]
                here_sum, there_sum = sums[..., 0], sums[..., 1]
            here = (high * here_sum).sum(-1)
            there = exponent * (high * (outer * here_sum + there_sum)).sum(-1)
            if self.blocks > 1:
                shift = exponent * np.array([0, 0.5, 0.5, 1])
                factor = np.exp(shift * lam[:, None])[:, None]
                there = (there + shift * here) * factor
                here = here * factor
            value, slope = value + here, slope + there
        a, da = value[:, 0, 0], slope[:, 0, 0]
        if self.blocks > 1:
            b, db = value[:, 0, 1], slope[:, 0, 1]
        for k in range(1, self.blocks):
            (m11, m21, m12, m22), (d11, d21, d12, d22) = value[:, k].T, slope[:, k].T
            da, db = m11 * da + m12 * db + d11 * a + d12 * b, m21 * da + m22 * db + d21 * a + d22 * b
            a, b = m11 * a + m12 * b, m21 * a + m22 * b
        return a, da


def _turns(phase, axis):
    """Whole turns between neighbours: rint of the phase difference over 2 pi."""
    return np.rint(np.diff(phase, axis=axis) / (2 * np.pi))


def _guesses(scattering, rows, floor, top, columns, half, ratio, levels):
    """Centres of the grid cells around which arg a turns, as (row, lambda)."""
    count = max(3, int(np.ceil(np.log(top / floor).max() / np.log(ratio))) + 1)
    eta = floor[:, None] * (top / floor)[:, None] ** np.linspace(0, 1, count)
    values = scattering.on_lines(eta, columns, half, rows, levels)
    phase = np.angle(values)
    along, across = _turns(phase, 2), _turns(phase, 1)
    winding = along[:, 1:] - along[:, :-1] + across[:, :, :-1] - across[:, :, 1:]
    window, line, column = np.nonzero(winding > 0)
    step = np.pi / (columns * scattering.dt)
    low, high = eta[window, line], eta[window, line + 1]
    # A zero of (lambda - zero) exp(c0 + c1 lambda) through the four corners.  The cross ratio is
    # free of c0 and c1 and gives +-x, the zero relative to the centre; the sign whose c1 agrees
    # along both edges is right.
    a00, a10 = values[window, line, column], values[window, line, column + 1]
    a01, a11 = values[window, line + 1, column], values[window, line + 1, column + 1]
    width = high - low
    diagonal, other = (step + 1j * width) / 2, (step - 1j * width) / 2
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


def _polish(scattering, row, start, scale, iterations=40):
    """Zeros of a near `start` (g,), made stationary together; returns (lambda, settled).

    Ehrlich-Aberth iteration: Newton's step on a divided by the factors
    (lambda - l_j)/(lambda - l_j*) of the other approximations of the same row, so that no two
    settle on one simple zero (Ehrlich 1967; Aberth 1973).  The conjugate denominators are those
    of the Blaschke product that a is, up to a smooth factor, in the upper half plane; without
    them the step is useless where many eigenvalues lie close together.
    """
    lam = start.copy()
    best = np.full(lam.shape, np.inf)
    settled = np.zeros(lam.shape, bool)
    active = np.arange(lam.size)
    same = row[:, None] == row
    for _ in range(iterations):
        if active.size == 0:
            break
        value, slope = scattering.at(row[active], lam[active])
        others = same[active]
        gap = np.where(others, lam[active, None] - lam, np.inf)
        gap[gap == 0] = np.inf
        mirror = np.where(others, lam[active, None] - lam.conj(), np.inf)
        with np.errstate(divide="ignore", invalid="ignore"):
            move = -value / (slope - value * (1 / gap - 1 / mirror).sum(axis=1))
        lost = ~np.isfinite(move)
        move[lost] = 0
        size = np.abs(move)
        limit = scale[row[active]]
        # stationary: rounding is reached, the step shrinks no more
        done = (size < 1e-8 * limit) & (size >= 0.25 * best[active]) | (value == 0)
        settled[active] = done
        move *= np.minimum(1, 0.2 * limit / np.maximum(size, 1e-300))
        lam[active] = np.where(done, lam[active], lam[active] + move)
        best[active] = np.minimum(best[active], size)
        lost |= lam[active].imag < -0.5 * limit
        active = active[~done & ~lost]
    return lam, settled


def _turn(before, after):
    """Change of phase from complex `before` to `after`, in (-pi, pi]."""
    return np.angle(after * np.conj(before))


def _contour_count(scattering, rows, floor, top, columns, half):
    """Zeros of a inside floor < Im < top, |Re| < pi half/(columns dt), by the argument principle.

    The contour is halved wherever arg a changes by more than `_PHASE_STEP` between neighbours;
    -1 for a row where that does not end because a zero lies on the contour.
    """
    step = np.pi / (columns * scattering.dt)
    lines = scattering.on_lines(
        np.stack([floor, top], 1), columns, half, rows, len(scattering.parts)
    )
    real = step * np.arange(-half, half + 1)
    share = np.linspace(0, 1, 16)[1:-1]
    eta = floor[:, None] * (top / floor)[:, None] ** share
    right, left = half * step + 1j * eta, -half * step + 1j * eta[:, ::-1]
    sides = np.concatenate([right, left], axis=1)
    values, _ = scattering.at(np.repeat(rows, sides.shape[1]), sides.ravel())
    on_right, on_left = np.split(values.reshape(sides.shape), 2, axis=1)
    points = [real + 1j * floor[:, None], right, real[::-1] + 1j * top[:, None], left]
    points = np.concatenate(points, axis=1)
    values = np.concatenate([lines[:, 0], on_right, lines[:, 1, ::-1], on_left], axis=1)
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
        at_middle, _ = scattering.at(rows[member], middle)
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


def _cluster(scattering, row, centre, scale):
    """All zeros, counted with multiplicity, in a small circle about `centre`.

    Power sums of the zeros by the residue theorem on the circle, then Newton's identities (Delves
    & Lyness 1967); exact for multiple zeros, where Newton's iteration loses half its digits.
    """
    angle = 2 * np.pi * np.arange(128) / 128
    for radius in (3e-4, 3e-3, 3e-2):
        offset = radius * scale * np.exp(1j * angle)
        value, slope = scattering.at(np.full(angle.size, row), centre + offset)
        weight = slope / value * offset / angle.size
        sums = [(weight * offset**p).sum() for p in range(5)]
        count = round(sums[0].real)
        if 1 <= count <= 4 and abs(sums[0] - count) < 1e-6:
            break
    else:
        return np.empty(0, complex)
    coefficients = [1.0]
    for k in range(1, count + 1):
        coefficients.append(
            -sum(coefficients[k - i] * sums[i] for i in range(1, k + 1)) / k
        )
    return centre + np.roots(coefficients)


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
    first = levels[min(levels)]
    peak = np.max([np.abs(q).max(axis=1) for q in levels.values()], axis=0)
    found = [np.empty(0, complex)] * peak.size
    # no eigenvalue has Im above max|q|; a potential of area below pi/2 has none that counts
    live = np.flatnonzero(peak > 0)
    if live.size == 0:
        return found
    if live.size < peak.size:
        levels = {parts: q[live] for parts, q in levels.items()}
    scattering = _Scattering(levels, dt)
    top, low = 1.05 * peak[live], floor * peak[live]
    side = _side(first[live], dt, low, peak[live])
    columns = 2 ** int(np.ceil(np.log2(2.5 * scattering.n)))
    rows = np.arange(live.size)

    def half(columns):
        return int(np.ceil(side * columns * dt / np.pi))

    count = _contour_count(scattering, rows, low, top, 2 * columns, half(2 * columns))
    for _ in range(4):
        on_zero = np.flatnonzero(count < 0)
        if on_zero.size == 0:
            break
        low[on_zero] *= 0.995
        count[on_zero] = _contour_count(
            scattering, on_zero, low[on_zero], top[on_zero], 2 * columns, half(2 * columns)
        )
    edge = np.pi * half(2 * columns) / (2 * columns * dt)
    open_rows = np.flatnonzero(count != 0)
    for finer, ratio, used in ((1, 1.3, 1), (2, 1.15, len(levels)), (8, 1.1, len(levels))):
        if open_rows.size == 0:
            break
        row, start = _guesses(
            scattering, open_rows, 0.85 * low[open_rows], top[open_rows],
            finer * columns, half(finer * columns), ratio, used,
        )
        lam, settled = _polish(scattering, row, start, peak[live])
        for i in open_rows:
            mine = row == i
            roots = _distinct(lam[mine & settled], peak[live][i])
            rest = lam[mine & ~settled]
            inside = _within(roots, low[i], top[i], edge)
            if inside.sum() != count[i] and rest.size:
                roots = _with_clusters(scattering, i, roots, rest, peak[live][i])
                inside = _within(roots, low[i], top[i], edge)
            roots = roots[inside]
            found[live[i]] = roots[np.argsort(-roots.imag)]
        open_rows = np.array([i for i in open_rows if found[live[i]].size != count[i]], int)
    if open_rows.size:
        worst = open_rows[0]
        raise NumericsError(
            f"found {found[live[worst]].size} eigenvalues where the argument principle counts "
            f"{count[worst]}; a finer step dt (now {dt:.4g}) or a higher floor is needed",
            achieved=found,
        )
    return found


def _within(lam, low, top, edge):
    return (lam.imag > low) & (lam.imag < top) & (np.abs(lam.real) < edge)


def _distinct(lam, scale):
    """`lam` without repetitions closer than rounding allows simple zeros to be."""
    kept = []
    for value in lam:
        if all(abs(value - other) > 1e-7 * scale for other in kept):
            kept.append(value)
    return np.array(kept, complex)


def _with_clusters(scattering, row, roots, rest, scale):
    """`roots` completed by the multiple zeros at which the iteration `rest` stalled."""
    for centre in rest:
        if not np.isfinite(centre) or centre.imag <= 0:
            continue
        cluster = _cluster(scattering, row, centre, scale)
        if cluster.size > 1:
            near = np.abs(roots[:, None] - cluster).min(axis=1, initial=np.inf) < 1e-5 * scale
            roots = np.concatenate([roots[~near], cluster])
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
    kh = envelope.k0 * envelope.depth
    cubic = nonlinear_coefficient(kh) * envelope.k0**3 / (2 * group_ratio(kh) * np.tanh(kh))
    factor = np.sqrt(max(float(cubic), 0.0) / (_curvature(envelope) * envelope.omega0**2))
    return np.conj(envelope.values) * factor, envelope.dt * envelope.omega0


def _checked(q, dt):
    q = np.asarray(q, complex)
    if q.ndim != 1 or q.size < 2:
        raise InputError(f"q must be one row of at least 2 samples, got shape {q.shape}")
    if not np.isfinite(q).all():
        raise InputError("q holds NaN or infinite values; gaps must be treated before")
    if not (np.isfinite(dt) and dt > 0):
        raise InputError(f"dt must be a positive scaled step omega0 dt, got {dt!r}")
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
    >>> np.round(discrete_spectrum(2.3 / np.cosh(t), 0.1, order=8), 8)
    array([0.+1.8j, 0.+0.8j])
    """
    q = _checked(q, dt)
    return _eigenvalues(_levels(q[None], order), dt, floor)[0]


def _levels(q, order):
    if order not in (2, 4, 6, 8):
        raise InputError(f"order must be 2, 4, 6 or 8, got {order!r}")
    return {parts: _substeps(q, parts) for parts in range(1, order // 2 + 1)}


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
    q = _checked(q, dt)
    centres = np.atleast_1d(np.asarray(centres, float))
    length = max(4, round(2 * half_width / dt))
    first = np.rint(centres / dt - length / 2 + 0.5).astype(int)
    edge = length / 8

    def taper(position):
        return _rise(position / edge) * _rise((length - position) / edge)

    levels = _cut(_levels(q[None], 4), first, length, taper)
    eigenvalues = _eigenvalues(levels, dt, floor)
    imaginary = [x.imag for x in eigenvalues]
    energy = (np.abs(levels[1]) ** 2).sum(axis=1) * dt
    sum_im = np.array([x.sum() for x in imaginary])
    chirp, distance, amplification = _focusing(levels[1], dt)
    return WindowedContent(
        largest=np.array([x[0] if x.size else 0.0 for x in imaginary]),
        largest_re=np.array([x[0].real if x.size else 0.0 for x in eigenvalues]),
        count=np.array([x.size for x in imaginary]),
        sum_im=sum_im,
        sum_im2=np.array([(x**2).sum() for x in imaginary]),
        energy_share=np.divide(4 * sum_im, energy, out=np.zeros_like(energy), where=energy > 0),
        chirp=chirp,
        focus_distance=distance,
        amplification=amplification,
    )


def _focusing(q, dt):
    """Chirp, focusing distance and amplification of the main group of each row of q (w, n).

    The group is replaced by the chirped sech A sech(T/tau) exp(-i mu log cosh(T/tau) A tau) of
    equal peak, width and phase curvature; the widths are weighted by |q|^4 so that the neighbours
    of the main group count little.  Its gradient catastrophe lies at tau/(2 A (mu + 2)) and the
    first peak (2.1985/2)(mu + 2)^(-6/5) e^(4/5) tau/A behind it, e = 1/(A tau) (Tovbis, Venakides
    & Zhou 2004; Bertola & Tovbis 2013, scaled).
    """
    weight = np.abs(q) ** 4
    total = weight.sum(axis=1)
    safe = np.where(total > 0, total, 1.0)
    time = dt * np.arange(q.shape[1])
    mean = (weight * time).sum(axis=1) / safe
    t = time - mean[:, None]
    variance = (weight * t**2).sum(axis=1) / safe
    slope = np.gradient(q, dt, axis=1)
    flux = np.abs(q) ** 2 * (np.conj(q) * slope).imag
    frequency = flux.sum(axis=1) / safe
    variance = np.where(variance > 0, variance, 1.0)
    chirp = ((flux - frequency[:, None] * weight) * t).sum(axis=1) / (safe * variance)
    peak = np.abs(q).max(axis=1)
    # sech^4: variance tau^2 (pi^2/12 - 1/2)
    tau = np.sqrt(variance / (np.pi**2 / 12 - 0.5))
    area = np.where(peak > 0, peak * tau, 1.0)
    strength = 2 - chirp * tau**2 / area  # mu + 2
    focuses = (strength > 0) & (peak > 0)
    rate = np.where(focuses, strength, 1.0)
    unit = tau / (2 * np.where(peak > 0, peak, 1.0))
    distance = unit * (1 / rate + 2.1985 * rate**-1.2 * area**-0.8)
    amplification = np.maximum(1.0, np.sqrt(rate))
    return (
        chirp,
        np.where(focuses, distance, np.nan),
        np.where(focuses, amplification, 1.0),
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
            smooth[bounds[i + 1]] / min(peaks[i], peaks[i + 1]) if min(peaks[i:i+2]) > 0 else 1.0
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
    >>> [np.round(g.eigenvalues, 3).tolist() for g in group_content(wave)]
    [[0.046j]]
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
    _, distance, amplification = _focusing(levels[1], dt)
    distance = distance * evolution_scale(envelope)
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
                focus_distance=float(distance[i]),
                amplification=float(amplification[i]),
            )
        )
    return tuple(content)
