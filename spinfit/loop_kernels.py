"""The sums of `spinfit.loop_sums`, point by point, for compilation.

Both do what their twins `spinfit.loop_sums.in_frequency_numpy` and `in_field_numpy` do, to rounding, and
stand under the same tests.  Arrays over nodes and points have shape (k, points).
"""

from __future__ import annotations

import math

import numpy as np

from spinfit.kernels import add_at, compiled, smear_class, taps_at
from spinfit.sheets import smear_at


def _value(c0, c1, c2, c3, c4, c5, t):
    return c0 + t * (c1 + t * (c2 + t * (c3 + t * (c4 + t * c5))))


def _rise(c1, c2, c3, c4, c5, t):
    return c1 + t * (2 * c2 + t * (3 * c3 + t * (4 * c4 + t * 5 * c5)))


def _quintic(f0, f1, f2, d0, d1, d2):
    even = 0.5 * (f2 + f0) - f1
    even_slope = 0.25 * (d2 - d0)
    odd = 0.5 * (f2 - f0)
    odd_slope = 0.5 * (d2 + d0)
    c5 = 0.5 * (odd_slope - 3 * odd + 2 * d1)
    return f1, d1, 2 * even - even_slope, odd - d1 - c5, even_slope - even, c5


def _refined(c0, c1, c2, c3, c4, c5, low, high, rounds):
    """Return the root inside a bracket, as `spinfit.hermite.refine`."""
    f_low = _value(c0, c1, c2, c3, c4, c5, low)
    f_high = _value(c0, c1, c2, c3, c4, c5, high)
    rising = f_high >= f_low
    span = f_high - f_low
    t = low - f_low * (high - low) / span if span != 0 else 0.5 * (low + high)
    t = min(max(t, low), high)
    for _ in range(rounds):
        f = _value(c0, c1, c2, c3, c4, c5, t)
        g = _rise(c1, c2, c3, c4, c5, t)
        if (f > 0) == rising:
            high = t
        else:
            low = t
        new = t - f / g if g != 0 else low - 1.0
        t = new if low <= new <= high else 0.5 * (low + high)
    return t


def _lagrange(nodes, first, size, field, basis):
    """Fill `basis` with the Lagrange polynomials of `size` nodes from `first` on, at a field."""
    for i in range(size):
        product = 1.0
        for j in range(size):
            if i != j:
                product *= (field - nodes[first + j]) / (nodes[first + i] - nodes[first + j])
        basis[i] = product


def _nearness_squared(apart, slope, bend, far, smear, fold):
    """Return the square of `spinfit.loop_sums.nearness`."""
    distance = apart / far
    return (distance * distance + fold * smear * apart * bend) / (slope * slope)


def _shared(nearness):
    """Return `spinfit.sheets.point_share` for an allowed distance of 1."""
    x = (nearness - 0.4) / 0.6
    if x <= 0.0:
        return 1.0
    if x >= 1.0:
        return 0.0
    return 1.0 - x * x * x * (10 + x * (6 * x - 15))


def _reaches(f_a, f_b, d_a, d_b, safety):
    """Return `spinfit.resonance.can_reach`."""
    inner_a = f_a + d_a / 3
    inner_b = f_b - d_b / 3
    bend = d_a - d_b
    tip = f_a
    if bend != 0:
        meet = (f_b - d_b - f_a) / bend
        if 0 < meet < 1:
            tip = f_a + d_a * meet
    low = min(f_a, f_b, inner_a, inner_b, tip)
    high = max(f_a, f_b, inner_a, inner_b, tip)
    margin = safety * (high - low)
    return low - margin <= 0 <= high + margin


def _in_frequency(
    density,
    fields,
    nodes,
    leaves,
    gap,
    slope,
    strength,
    bend,
    along,
    around,
    own,
    weights,
    step,
    numbers,
    reach,
    stencil,
):
    far, smear, fold = numbers
    least = fold * (0.9 * step) ** 2 / smear
    broad = own.shape[0] > 0
    used = 0
    size = min(stencil, len(nodes))
    basis = np.empty((len(fields), size))
    norm = 1.0 / math.sqrt(2 * math.pi)
    for leaf in range(leaves.shape[0]):
        a, m, b = leaves[leaf]
        begin, end = np.searchsorted(fields, nodes[a]), np.searchsorted(fields, nodes[b])
        if begin == end:
            continue
        half = 0.5 * (nodes[b] - nodes[a])
        first = min(max(m - stencil // 2, 0), len(nodes) - size)
        for q in range(begin, end):
            _lagrange(nodes, first, size, fields[q], basis[q])
        for p in range(gap.shape[1]):
            f0, f1, f2 = gap[a, p], gap[m, p], gap[b, p]
            d0, d1, d2 = slope[a, p] * half, slope[m, p] * half, slope[b, p] * half
            i0, i1, i2, i3 = f0 + d0 / 3, f1 - d1 / 3, f1 + d1 / 3, f2 - d2 / 3
            low = min(f0, f1, f2, i0, i1, i2, i3)
            high = max(f0, f1, f2, i0, i1, i2, i3)
            most = bent = 0.0
            widest = 0.0
            for n in (a, m, b):
                bent = max(bent, abs(bend[n, p]))
                x = least * bend[n, p]
                most = max(most, along[n, p] ** 2 + around[n, p] ** 2 + x * x)
                if broad:
                    widest = max(widest, own[n, p] + (smear * step * slope[n, p]) ** 2)
            most = math.sqrt(most) + 1e-9
            widest = 1.2 * reach * math.sqrt((smear * most) ** 2 + widest)
            margin = widest + 0.25 * (high - low)
            if low > margin or high < -margin:
                continue
            steep = min(
                abs(slope[a, p]),
                abs(slope[m, p]),
                abs(slope[b, p]),
                abs(d0 + d1) / (2 * half),
                abs(d1 + d2) / (2 * half),
                abs(d2 + d0) / (2 * half),
            )
            steep = max(steep, 1e-9)
            if not broad and (most / far) ** 2 + fold * smear * most * bent <= 0.0625 * steep * steep:
                continue
            c0, c1, c2, c3, c4, c5 = _quintic(f0, f1, f2, d0, d1, d2)
            for q in range(begin, end):
                t = (fields[q] - nodes[m]) / half
                g = _value(c0, c1, c2, c3, c4, c5, t)
                if abs(g) >= widest:
                    continue
                used += 1
                s = e = x = y = v = 0.0
                for i in range(size):
                    w = basis[q, i]
                    s += w * strength[first + i, p]
                    e += w * bend[first + i, p]
                    x += w * along[first + i, p]
                    y += w * around[first + i, p]
                    if broad:
                        v += w * own[first + i, p]
                e = abs(e)
                v = max(v, 0.0)
                rise = max(abs(_rise(c1, c2, c3, c4, c5, t)) / half, 1e-9)
                apart = math.sqrt(x * x + y * y + (least * e) ** 2) + 1e-9
                square = (smear * apart) ** 2
                if broad:
                    square += (smear * step * rise) ** 2
                total = square + v
                u2 = g * g / total
                if u2 >= reach * reach:
                    continue
                rest = 1.0
                if not broad:
                    rest -= _shared(math.sqrt(_nearness_squared(apart, rise, e, far, smear, fold)))
                    if rest == 0.0:
                        continue
                r = square / total
                kernel = (
                    math.exp(-0.5 * u2)
                    * norm
                    * (1.0 + 0.5 * r * (1.0 - u2) + 0.125 * r * r * (u2 * u2 - 6.0 * u2 + 3.0))
                )
                density[q] += step * s * rest * kernel / math.sqrt(total) * weights[p]
    return used


def _in_field(
    into,
    start,
    spacing,
    least_size,
    ratio,
    nodes,
    leaves,
    gap,
    slope,
    strength,
    bend,
    along,
    around,
    weights,
    step,
    numbers,
    close,
    safety,
    stencil,
):
    far, smear, fold = numbers
    least = fold * (0.9 * step) ** 2 / smear
    rows, count = into.shape
    turn = 1.0 / math.log(ratio)
    used = 0
    size = min(stencil, len(nodes))
    basis = np.empty(size)
    low = np.empty(16)
    high = np.empty(16)
    for leaf in range(leaves.shape[0]):
        a, m, b = leaves[leaf]
        half = 0.5 * (nodes[b] - nodes[a])
        first = min(max(m - stencil // 2, 0), len(nodes) - size)
        for p in range(gap.shape[1]):
            f0, f1, f2 = gap[a, p], gap[m, p], gap[b, p]
            d0, d1, d2 = slope[a, p] * half, slope[m, p] * half, slope[b, p] * half
            if not (_reaches(f0, f1, d0, d1, safety) or _reaches(f1, f2, d1, d2, safety)):
                continue
            steep = max(abs(d0), abs(d1), abs(d2), abs(f1 - f0), abs(f2 - f1)) / half
            apart = min(
                math.hypot(along[a, p], around[a, p]),
                math.hypot(along[m, p], around[m, p]),
                math.hypot(along[b, p], around[b, p]),
            )
            if apart >= 1.5 * far * steep:
                continue
            c0, c1, c2, c3, c4, c5 = _quintic(f0, f1, f2, d0, d1, d2)
            number = 0
            before, rise_before = f0, _rise(c1, c2, c3, c4, c5, -1.0)
            for k in range(1, 9):
                t = -1.0 + 0.25 * k
                here = f1 if k == 4 else (f2 if k == 8 else _value(c0, c1, c2, c3, c4, c5, t))
                rise = _rise(c1, c2, c3, c4, c5, t)
                if (here >= 0) != (before >= 0):
                    low[number], high[number] = t - 0.25, t
                    number += 1
                elif rise * rise_before < 0 and (rise_before > 0) != (before >= 0):
                    # a fold hides between two samples of one sign
                    top = _refined(c1, 2 * c2, 3 * c3, 4 * c4, 5 * c5, 0.0, t - 0.25, t, 5)
                    if (_value(c0, c1, c2, c3, c4, c5, top) >= 0) != (here >= 0):
                        low[number], high[number] = t - 0.25, top
                        low[number + 1], high[number + 1] = top, t
                        number += 2
                before, rise_before = here, rise
            for k in range(number):
                t = _refined(c0, c1, c2, c3, c4, c5, low[k], high[k], 5)
                rise = max(abs(_rise(c1, c2, c3, c4, c5, t)) / half, 1e-9)
                field = nodes[m] + half * t
                _lagrange(nodes, first, size, field, basis)
                s = e = x = y = 0.0
                for i in range(size):
                    w = basis[i]
                    s += w * strength[first + i, p]
                    e += w * bend[first + i, p]
                    x += w * along[first + i, p]
                    y += w * around[first + i, p]
                e = abs(e)
                apart = math.sqrt(x * x + y * y + (least * e) ** 2) + 1e-9
                share = _shared(math.sqrt(_nearness_squared(apart, rise, e, far, smear, fold)))
                if share == 0.0:
                    continue
                weight = s / rise * share * weights[p]
                used += 1
                row, upper = smear_class(smear_at(apart / rise, close, smear), least_size, turn, rows)
                for sign in (1.0, -1.0):
                    if sign < 0 and start >= 0:
                        break  # the spectrum is even in B
                    x = (sign * field - start) / spacing
                    if x < 1.0 or x >= count - 3:
                        continue
                    i = int(x)
                    taps = taps_at(x - i)
                    add_at(into[row], i, weight * (1.0 - upper), taps)
                    add_at(into[row + 1], i, weight * upper, taps)
    return used


_value, _rise, _quintic = compiled(_value), compiled(_rise), compiled(_quintic)
_refined, _lagrange, _shared = compiled(_refined), compiled(_lagrange), compiled(_shared)
_nearness_squared, _reaches = compiled(_nearness_squared), compiled(_reaches)
in_frequency, in_field = compiled(_in_frequency), compiled(_in_field)
