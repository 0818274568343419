"""The sums of `spinfit.loop_sums` and the meshes of `spinfit.landscape`, point by point, for compilation.

All do what their twins there, named the same and `_numpy`, do, to rounding, and stand under the same
tests.  Arrays over nodes and points have shape (k, points).
"""

from __future__ import annotations

import math

import numpy as np

from spinfit.kernels import add_at, compiled, smear_class, taps_at
from spinfit.sheets import smear_at

TINY = 1e-18
"""MHz^2 that neighbours differ by at the least, squared."""


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


def _parabola(s0, s1, s2):
    """Return the coefficients of the parabola through values at t = -1, 0, 1."""
    return s1, 0.5 * (s2 - s0), 0.5 * (s2 + s0) - s1


def _on_parabola(s0, s1, s2, t):
    return s1 + t * (0.5 * (s2 - s0) + t * (0.5 * (s2 + s0) - s1))


def _lagrange(nodes, first, size, field, basis):
    """Fill `basis` with the Lagrange polynomials of `size` nodes from `first` on, at a field."""
    for i in range(size):
        product = 1.0
        for j in range(size):
            if i != j:
                product *= (field - nodes[first + j]) / (nodes[first + i] - nodes[first + j])
        basis[i] = product


def _shared(apart_squared, slope, bend, far, smear, fold):
    """Return `spinfit.sheets.point_share` of `spinfit.loop_sums.nearness` for an allowed distance of 1."""
    square = (apart_squared / (far * far) + fold * smear * math.sqrt(apart_squared) * bend) / (slope * slope)
    if square >= 1.0:
        return 0.0
    if square <= 0.16:
        return 1.0
    x = (math.sqrt(square) - 0.4) / 0.6
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
    points,
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
    places, gaps = np.empty(len(fields)), np.empty(len(fields))
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
            places[q] = (fields[q] - nodes[m]) / half
        for p in range(points[leaf, 0], points[leaf, 1]):
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
            most = math.sqrt(most + TINY)
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
                gaps[q] = _value(c0, c1, c2, c3, c4, c5, places[q])
            x0, x1, x2 = _parabola(along[a, p], along[m, p], along[b, p])
            y0, y1, y2 = _parabola(around[a, p], around[m, p], around[b, p])
            e0, e1, e2 = _parabola(bend[a, p], bend[m, p], bend[b, p])
            for q in range(begin, end):
                g = gaps[q]
                if abs(g) >= widest:
                    continue
                used += 1
                t = places[q]
                x = x0 + t * (x1 + t * x2)
                y = y0 + t * (y1 + t * y2)
                e = abs(e0 + t * (e1 + t * e2))
                rise = max(abs(_rise(c1, c2, c3, c4, c5, t)) / half, 1e-9)
                apart_squared = x * x + y * y + (least * e) ** 2 + TINY
                square = smear * smear * apart_squared
                v = 0.0
                if broad:
                    square += (smear * step * rise) ** 2
                    for i in range(size):
                        v += basis[q, i] * own[first + i, p]
                    v = max(v, 0.0)
                total = square + v
                u2 = g * g / total
                if u2 >= reach * reach:
                    continue
                rest = 1.0
                if not broad:
                    rest -= _shared(apart_squared, rise, e, far, smear, fold)
                    if rest == 0.0:
                        continue
                s = 0.0
                for i in range(size):
                    s += basis[q, i] * strength[first + i, p]
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
    points,
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
        for p in range(points[leaf, 0], points[leaf, 1]):
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
            # most resonances are alone in their leaf: steep at five places, and the same way
            up = d1 > 0
            alone = (d0 > 0) == up and (d2 > 0) == up and (f1 > f0) == up and (f2 > f1) == up
            alone = alone and (_rise(c1, c2, c3, c4, c5, -0.5) > 0) == up and (_rise(c1, c2, c3, c4, c5, 0.5) > 0) == up
            if alone:
                if (f0 >= 0) == (f2 >= 0):
                    continue
                low[0], high[0] = (-1.0, 0.0) if (f0 >= 0) != (f1 >= 0) else (0.0, 1.0)
                number = 1
            before, rise_before = f0, _rise(c1, c2, c3, c4, c5, -1.0)
            for k in range(1, 1 if alone else 9):
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
                x = _on_parabola(along[a, p], along[m, p], along[b, p], t)
                y = _on_parabola(around[a, p], around[m, p], around[b, p], t)
                e = abs(_on_parabola(bend[a, p], bend[m, p], bend[b, p], t))
                apart_squared = x * x + y * y + (least * e) ** 2 + TINY
                share = _shared(apart_squared, rise, e, far, smear, fold)
                if share == 0.0:
                    continue
                _lagrange(nodes, first, size, field, basis)
                s = 0.0
                for i in range(size):
                    s += basis[i] * strength[first + i, p]
                weight = s / rise * share * weights[p]
                used += 1
                smeared = smear_at(math.sqrt(apart_squared) / rise, close, smear)
                row, upper = smear_class(smeared, least_size, turn, rows)
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


def _folded(i, count):
    """Return the place of a place past either end of values that are even about both."""
    if i < 0:
        return -i
    return i if i < count else 2 * (count - 1) - i


def _doubled(values, rows, start, octant, opposite, middle, out):
    columns, nodes, count, azimuths = values.shape
    finer = out.shape[3]
    m0, m1, m2 = middle[0], middle[1], middle[2]
    buffer = np.empty((count, finer))
    for column in range(columns):
        for node in range(nodes):
            first, last = rows[node]
            if first >= last:
                continue
            first, last = first + start, last + start
            for i in range(max(0, first // 2 - 2), min(count, last // 2 + 4)):
                if azimuths == 1:
                    buffer[i, 0] = values[column, node, i, 0]
                    continue
                row, into = values[column, node, i], buffer[i]
                for j in range(2, azimuths - 3):
                    into[2 * j] = row[j]
                    into[2 * j + 1] = (
                        m0 * (row[j - 2] + row[j + 3]) + m1 * (row[j - 1] + row[j + 2]) + m2 * (row[j] + row[j + 1])
                    )
                ends = min(5, azimuths)
                for end in range(ends):
                    j = end if end < 2 else azimuths - ends + end
                    into[2 * j] = row[j]
                    if 2 * j + 1 < finer:
                        total = 0.0
                        for n in range(6):
                            k = j - 2 + n
                            total += middle[n] * row[_folded(k, azimuths) if octant else k % azimuths]
                        into[2 * j + 1] = total
            for r in range(first, last):
                i = r // 2
                into = out[column, node, r - start]
                if r == 2 * i:
                    into[:] = buffer[i]
                    continue
                if opposite == 0 or 2 <= i < count - 3:
                    b0, b1, b2 = buffer[_folded(i - 2, count)], buffer[_folded(i - 1, count)], buffer[i]
                    b3, b4, b5 = buffer[i + 1], buffer[_folded(i + 2, count)], buffer[_folded(i + 3, count)]
                    for j in range(finer):
                        into[j] = m0 * (b0[j] + b5[j]) + m1 * (b1[j] + b4[j]) + m2 * (b2[j] + b3[j])
                    continue
                into[:] = 0.0
                for n in range(6):
                    k = i - 2 + n
                    here = _folded(k, count)
                    turned = 0 if here == k else opposite
                    for j in range(finer):
                        into[j] += middle[n] * buffer[here, (j + turned) % finer]


def _surroundings(shares, gap, slope, rows, octant, out):
    nodes, _, azimuths = gap.shape
    for node in range(nodes):
        first, last = rows[node]
        w0, w1, w2 = shares[node]
        for r in range(first, last):
            before, after, here = gap[node, max(first, r - 1)], gap[node, min(last - 1, r + 1)], gap[node, r]
            s0, s1, s2 = slope[max(0, node - 1), r], slope[node, r], slope[min(nodes - 1, node + 1), r]
            along, around, bend = out[0, node, r], out[1, node, r], out[2, node, r]
            for j in range(azimuths):
                along[j] = 0.5 * (after[j] - before[j])
                bend[j] = w0 * s0[j] + w1 * s1[j] + w2 * s2[j]
            if azimuths == 1:
                continue
            for j in range(1, azimuths - 1):
                around[j] = 0.5 * (here[j + 1] - here[j - 1])
            end = azimuths - 1
            low, high = (0, end) if octant else (end, 0)
            around[0] = 0.5 * (here[1] - here[low])
            around[end] = 0.5 * (here[high] - here[end - 1])


_value, _rise, _quintic = compiled(_value), compiled(_rise), compiled(_quintic)
_parabola, _on_parabola = compiled(_parabola), compiled(_on_parabola)
_refined, _lagrange, _shared = compiled(_refined), compiled(_lagrange), compiled(_shared)
_reaches = compiled(_reaches)
in_frequency, in_field = compiled(_in_frequency), compiled(_in_field)
_folded = compiled(_folded)
doubled, surroundings = compiled(_doubled), compiled(_surroundings)
