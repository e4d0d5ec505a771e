"""Compiled near and self reactions between pairs of wire elements, in Legendre moments.

Every function returns (or fills) the moments

    J[m, n] = integral over u, u' of P_m(u) P_n(u') K(u, u') (h/2) (h'/2) du du'

of two elements of lengths h and h', K being the circumferentially averaged kernel exp(-jkR)/R.  Any
polynomial basis and its charge follow from J by small matrix products, so that one set of moments serves
vector and scalar potential.  Nothing here raises.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from elbowroom.kernels.accelerate import JIT_OPTIONS


@njit(**JIT_OPTIONS)
def _ring_means(far, near):
    """Return the means of 1/R and R over a ring whose largest and smallest distances are given.

    With R^2 = near^2 + (far^2 - near^2) sin^2(phi/2) the mean of 1/R is 1/agm(far, near) and that of R is
    (2/pi) far E(m): the arithmetic-geometric mean gives both at once (DLMF 19.8.5, 19.8.6).
    """
    a = far
    b = near
    c2 = far * far - near * near
    total = 0.5 * c2
    power = 0.5
    for _ in range(40):
        c = 0.5 * (a - b)
        if c <= 1e-9 * a:
            break
        an = 0.5 * (a + b)
        b = math.sqrt(a * b)
        a = an
        power *= 2.0
        total += power * c * c
    # One more step, so that the mean is exact to rounding although the loop stops at 1e-9.
    c = 0.5 * (a - b)
    mean = 0.5 * (a + b) - c * c / (4.0 * 0.5 * (a + b))
    total += 2.0 * power * c * c
    return 1.0 / mean, (far * far - total) / mean


@njit(**JIT_OPTIONS)
def ring_kernel(offset2, difference2, product4, wavenumber, n_ring):
    """Return the mean of exp(-jkR)/R over a ring, R^2 = offset2 + difference2 + product4 sin^2(phi/2).

    The 1/R and R parts, whose derivatives jump or blow up where R touches zero, are taken from elliptic
    integrals; the rest is smooth in R^2 and a trapezoidal rule of ``n_ring`` points gives it to rounding.
    """
    near2 = offset2 + difference2
    far = math.sqrt(near2 + product4)
    near = math.sqrt(near2)
    mean_inverse, mean_distance = _ring_means(far, near)
    even = 0.0
    odd = 0.0
    for i in range(n_ring):
        sine = math.sin((i + 0.5) * math.pi / (2.0 * n_ring))
        x = wavenumber * math.sqrt(near2 + product4 * sine * sine)
        x2 = x * x
        if x < 0.5:
            even += x * x2 / 24.0 * (1.0 - x2 / 30.0 * (1.0 - x2 / 56.0 * (1.0 - x2 / 90.0 * (1.0 - x2 / 132.0))))
            odd += 1.0 - x2 / 6.0 * (1.0 - x2 / 20.0 * (1.0 - x2 / 42.0 * (1.0 - x2 / 72.0 * (1.0 - x2 / 110.0))))
        else:
            even += (math.cos(x) - 1.0 + 0.5 * x2) / x
            odd += math.sin(x) / x
    real = mean_inverse - 0.5 * wavenumber * wavenumber * mean_distance + wavenumber * even / n_ring
    return complex(real, -wavenumber * odd / n_ring)


@njit(**JIT_OPTIONS)
def _legendre(u, values):
    """Fill ``values`` with P_0(u) .. P_{len-1}(u)."""
    values[0] = 1.0
    if values.size > 1:
        values[1] = u
    for n in range(2, values.size):
        values[n] = ((2 * n - 1) * u * values[n - 1] - (n - 1) * values[n - 2]) / n


@njit(**JIT_OPTIONS)
def _graded_breaks(lower, upper, smallest, breaks):
    """Fill ``breaks`` with panel ends on [lower, upper] that grow from 0 by a factor of four; return their count."""
    count = 1
    breaks[0] = lower
    if lower < 0.0 < upper:
        x = -lower
        while x > smallest and count < breaks.size - 60:
            x *= 0.25
            breaks[count] = -x
            count += 1
        breaks[count] = 0.0
        count += 1
        x = upper
        m = 0
        while x > smallest and m < 50:
            x *= 0.25
            m += 1
        for i in range(m, 0, -1):
            breaks[count] = upper * 0.25**i
            count += 1
    elif lower >= 0.0:
        m = 0
        x = upper
        while x > max(4.0 * lower, smallest) and m < 50:
            x *= 0.25
            m += 1
        for i in range(m, 0, -1):
            breaks[count] = upper * 0.25**i
            count += 1
    else:
        x = -lower
        while x > max(-4.0 * upper, smallest) and count < breaks.size - 2:
            x *= 0.25
            breaks[count] = -x
            count += 1
    breaks[count] = upper
    return count + 1


@njit(**JIT_OPTIONS)
def coaxial_moments(start, end, start2, end2, radius, radius2, wavenumber, order, order2, nodes, weights, n_ring, out):
    """Fill ``out`` (order+1, order2+1) with the moments of two elements on one axis.

    The positions are coordinates along the common axis; an element that runs backwards has end < start.
    The double integral is turned into one over s = z - z' of the exact kernel times the correlation of the two
    polynomials, which Gauss rules give exactly; the s axis is cut where the correlation changes its formula and
    graded geometrically towards the logarithm at s = 0.
    """
    low = min(start, end)
    high = max(start, end)
    low2 = min(start2, end2)
    high2 = max(start2, end2)
    half = 0.5 * (end - start)
    half2 = 0.5 * (end2 - start2)
    middle = 0.5 * (start + end)
    middle2 = 0.5 * (start2 + end2)
    difference2 = (radius - radius2) ** 2
    product4 = 4.0 * radius * radius2
    corners = np.empty(4)
    corners[0] = low - high2
    corners[1] = low - low2
    corners[2] = high - high2
    corners[3] = high - low2
    corners.sort()
    smallest = 1e-9 * max(radius, radius2)
    tiny = 1e-13 * (corners[3] - corners[0])
    breaks = np.empty(160)
    values = np.empty(order + 1)
    values2 = np.empty(order2 + 1)
    inner = np.empty((order + 1, order2 + 1))
    n_gauss = (order + order2) // 2 + 1
    gauss, gauss_weights = nodes[n_gauss], weights[n_gauss]
    n_s = 14
    s_nodes, s_weights = nodes[n_s], weights[n_s]
    out[:, :] = 0.0
    for c in range(3):
        if corners[c + 1] - corners[c] <= tiny:
            continue
        # An element touching the singular point to rounding must be graded as if it touched it exactly.
        lower = 0.0 if abs(corners[c]) <= tiny else corners[c]
        upper = 0.0 if abs(corners[c + 1]) <= tiny else corners[c + 1]
        count = _graded_breaks(lower, upper, smallest, breaks)
        for b in range(count - 1):
            s_half = 0.5 * (breaks[b + 1] - breaks[b])
            s_middle = 0.5 * (breaks[b + 1] + breaks[b])
            for i in range(n_s):
                s = s_middle + s_half * s_nodes[i]
                z_low = max(low, low2 + s)
                z_high = min(high, high2 + s)
                if z_high <= z_low:
                    continue
                kernel = ring_kernel(s * s, difference2, product4, wavenumber, n_ring) * (s_half * s_weights[i])
                z_half = 0.5 * (z_high - z_low)
                z_middle = 0.5 * (z_high + z_low)
                inner[:, :] = 0.0
                for q in range(n_gauss):
                    z = z_middle + z_half * gauss[q]
                    _legendre((z - middle) / half, values)
                    _legendre((z - s - middle2) / half2, values2)
                    w = z_half * gauss_weights[q]
                    for m in range(order + 1):
                        for n in range(order2 + 1):
                            inner[m, n] += w * values[m] * values2[n]
                for m in range(order + 1):
                    for n in range(order2 + 1):
                        out[m, n] += kernel * inner[m, n]


@njit(**JIT_OPTIONS)
def _segment_distance(p, dp, q, dq):
    """Return the distance between the segments p + s dp and q + t dq, 0 <= s, t <= 1, and the s and t of it."""
    a = dp[0] * dp[0] + dp[1] * dp[1] + dp[2] * dp[2]
    e = dq[0] * dq[0] + dq[1] * dq[1] + dq[2] * dq[2]
    r0, r1, r2 = p[0] - q[0], p[1] - q[1], p[2] - q[2]
    b = dp[0] * dq[0] + dp[1] * dq[1] + dp[2] * dq[2]
    c = dp[0] * r0 + dp[1] * r1 + dp[2] * r2
    f = dq[0] * r0 + dq[1] * r1 + dq[2] * r2
    best = 1e300
    best_s = 0.0
    best_t = 0.0
    denominator = a * e - b * b
    for trial in range(3):
        if trial == 0:
            s = (b * f - c * e) / denominator if denominator > 1e-12 * a * e else 0.5
        else:
            s = trial - 1.0
        s = min(max(s, 0.0), 1.0)
        t = min(max((b * s + f) / e, 0.0), 1.0)
        s = min(max((b * t - c) / a, 0.0), 1.0)
        x, y, z = r0 + s * dp[0] - t * dq[0], r1 + s * dp[1] - t * dq[1], r2 + s * dp[2] - t * dq[2]
        d = math.sqrt(x * x + y * y + z * z)
        if d < best:
            best, best_s, best_t = d, s, t
    return best, best_s, best_t


@njit(**JIT_OPTIONS)
def _gauss_count(ratio, phase, order, tolerance):
    """Return how many Gauss points integrate degree ``order`` times a kernel whose pole is ``ratio`` half lengths away.

    The error of an n-point rule falls as rho^(-2n) with rho = ratio + sqrt(ratio^2 + 1) (Bernstein ellipse through
    a pole beside the middle of the interval), and for a phase that turns by ``phase`` from the middle to the end as
    (phase/2)^(2n)/(2n)!; the polynomial costs ``order`` of either.
    """
    rho = ratio + math.sqrt(ratio * ratio + 1.0)
    degree = -math.log(tolerance) / math.log(rho)
    term = 0.5 * phase
    m = 1
    while term > tolerance and m < 40:
        m += 1
        term *= 0.5 * phase / m
    n = math.ceil((max(degree, float(m)) + order) / 2.0)
    return min(max(n, order // 2 + 2), 24)


@njit(**JIT_OPTIONS)
def _ring_count(ratio, tolerance):
    """Return how many points of a ring represent its mean at a distance of ``ratio`` radii."""
    n = math.ceil(-math.log(tolerance) / math.log(ratio))
    return min(max(n, 3), 24)


@njit(**JIT_OPTIONS)
def _separated_panels(
    p, dp, u0, u1, q, dq, v0, v1, e1, e2, f1, f2, radius, radius2, k, n, n2, n_ring, n_ring2, nodes, weights, out
):
    """Add the moments of the panels [u0, u1] and [v0, v1] of two tubes that are well apart.

    Both tubes are sampled on rings of ``n_ring`` and ``n_ring2`` points; u and v run over [-1, 1].
    """
    order, order2 = out.shape[0] - 1, out.shape[1] - 1
    values, values2 = np.empty(order + 1), np.empty(order2 + 1)
    row = np.empty(order2 + 1, np.complex128)
    length = 0.5 * math.sqrt(dp[0] ** 2 + dp[1] ** 2 + dp[2] ** 2)
    length2 = 0.5 * math.sqrt(dq[0] ** 2 + dq[1] ** 2 + dq[2] ** 2)
    gauss, gauss2 = nodes[n], nodes[n2]
    for i in range(n):
        u = 0.5 * (u0 + u1) + 0.5 * (u1 - u0) * gauss[i]
        wu = 0.5 * (u1 - u0) * weights[n, i] * length
        s = 0.5 * (u + 1.0)
        row[:] = 0.0
        for j in range(n2):
            v = 0.5 * (v0 + v1) + 0.5 * (v1 - v0) * gauss2[j]
            wv = 0.5 * (v1 - v0) * weights[n2, j] * length2
            t = 0.5 * (v + 1.0)
            x = p[0] + s * dp[0] - q[0] - t * dq[0]
            y = p[1] + s * dp[1] - q[1] - t * dq[1]
            z = p[2] + s * dp[2] - q[2] - t * dq[2]
            real = 0.0
            imag = 0.0
            for a in range(n_ring):
                angle = 2.0 * math.pi * (a + 0.5) / n_ring
                c, d = radius * math.cos(angle), radius * math.sin(angle)
                xa = x + c * e1[0] + d * e2[0]
                ya = y + c * e1[1] + d * e2[1]
                za = z + c * e1[2] + d * e2[2]
                for b in range(n_ring2):
                    angle = 2.0 * math.pi * (b + 0.25) / n_ring2
                    c, d = radius2 * math.cos(angle), radius2 * math.sin(angle)
                    xb = xa - c * f1[0] - d * f2[0]
                    yb = ya - c * f1[1] - d * f2[1]
                    zb = za - c * f1[2] - d * f2[2]
                    r = math.sqrt(xb * xb + yb * yb + zb * zb)
                    real += math.cos(k * r) / r
                    imag -= math.sin(k * r) / r
            kernel = complex(real, imag) * (wv / (n_ring * n_ring2))
            _legendre(v, values2)
            for m in range(order2 + 1):
                row[m] += kernel * values2[m]
        _legendre(u, values)
        for m in range(order + 1):
            for m2 in range(order2 + 1):
                out[m, m2] += wu * values[m] * row[m2]


@njit(**JIT_OPTIONS)
def _touching_panels(p, dp, u0, u1, q, dq, v0, v1, e1, e2, radius, radius2, k, n_outer, n_ring, nodes, weights, breaks, out):
    """Add the moments of two short panels whose tubes may touch or cut each other.

    The second tube's ring mean is analytic (its logarithm included) and its length is integrated on panels graded
    towards the foot of the observation point; the first tube is sampled on a ring and by Gauss points.
    """
    order, order2 = out.shape[0] - 1, out.shape[1] - 1
    values, values2 = np.empty(order + 1), np.empty(order2 + 1)
    row = np.empty(order2 + 1, np.complex128)
    length = 0.5 * math.sqrt(dp[0] ** 2 + dp[1] ** 2 + dp[2] ** 2)
    full2 = math.sqrt(dq[0] ** 2 + dq[1] ** 2 + dq[2] ** 2)
    t0, t1, t2 = dq[0] / full2, dq[1] / full2, dq[2] / full2
    low, high = 0.5 * (v0 + 1.0) * full2, 0.5 * (v1 + 1.0) * full2
    n_inner = 10
    for i in range(n_outer):
        u = 0.5 * (u0 + u1) + 0.5 * (u1 - u0) * nodes[n_outer, i]
        wu = 0.5 * (u1 - u0) * weights[n_outer, i] * length
        s = 0.5 * (u + 1.0)
        row[:] = 0.0
        for a in range(n_ring):
            angle = 2.0 * math.pi * (a + 0.5) / n_ring
            c, d = radius * math.cos(angle), radius * math.sin(angle)
            x = p[0] + s * dp[0] + c * e1[0] + d * e2[0] - q[0]
            y = p[1] + s * dp[1] + c * e1[1] + d * e2[1] - q[1]
            z = p[2] + s * dp[2] + c * e1[2] + d * e2[2] - q[2]
            foot = x * t0 + y * t1 + z * t2
            rho = math.sqrt(max(x * x + y * y + z * z - foot * foot, 0.0))
            difference2 = (rho - radius2) ** 2
            product4 = 4.0 * rho * radius2
            smallest = max(abs(rho - radius2), 1e-7 * radius2)
            count = _graded_breaks(low - foot, high - foot, smallest, breaks)
            for b in range(count - 1):
                half = 0.5 * (breaks[b + 1] - breaks[b])
                middle = 0.5 * (breaks[b + 1] + breaks[b])
                for j in range(n_inner):
                    h = middle + half * nodes[n_inner, j]
                    kernel = ring_kernel(h * h, difference2, product4, k, 6) * (half * weights[n_inner, j])
                    _legendre(2.0 * (h + foot) / full2 - 1.0, values2)
                    for m in range(order2 + 1):
                        row[m] += kernel * values2[m]
        _legendre(u, values)
        for m in range(order + 1):
            for m2 in range(order2 + 1):
                out[m, m2] += (wu / n_ring) * values[m] * row[m2]


@njit(**JIT_OPTIONS)
def angled_moments(start, end, start2, end2, radius, radius2, wavenumber, tolerance, touching_points, nodes, weights, out):
    """Fill ``out`` with the moments of two elements that do not share an axis.

    Both currents are spread over the circumference of their tubes.  Panels are halved until they are as far apart
    as they are long; those that end up shorter than four radii and nearer than eight are integrated as touching.
    """
    out[:, :] = 0.0
    order, order2 = out.shape[0] - 1, out.shape[1] - 1
    dp, dq = end - start, end2 - start2
    h = math.sqrt(dp[0] ** 2 + dp[1] ** 2 + dp[2] ** 2)
    h2 = math.sqrt(dq[0] ** 2 + dq[1] ** 2 + dq[2] ** 2)
    t, t2 = dp / h, dq / h2
    # Rings are oriented by the plane of the two axes, so that the result moves and turns with them.
    normal = np.empty(3)
    normal[0] = t[1] * t2[2] - t[2] * t2[1]
    normal[1] = t[2] * t2[0] - t[0] * t2[2]
    normal[2] = t[0] * t2[1] - t[1] * t2[0]
    size = math.sqrt(normal[0] ** 2 + normal[1] ** 2 + normal[2] ** 2)
    if size < 1e-6:
        gap = start2 - start
        gap = gap - (gap[0] * t[0] + gap[1] * t[1] + gap[2] * t[2]) * t
        normal[:] = gap
        size = math.sqrt(normal[0] ** 2 + normal[1] ** 2 + normal[2] ** 2)
        if size < 1e-9 * (h + h2):
            # On one axis any direction across it serves.
            smallest = 0
            for c in range(3):
                if abs(t[c]) < abs(t[smallest]):
                    smallest = c
            normal[:] = -t[smallest] * t
            normal[smallest] += 1.0
            size = math.sqrt(normal[0] ** 2 + normal[1] ** 2 + normal[2] ** 2)
    normal /= size
    e2, f2 = np.empty(3), np.empty(3)
    e2[0] = t[1] * normal[2] - t[2] * normal[1]
    e2[1] = t[2] * normal[0] - t[0] * normal[2]
    e2[2] = t[0] * normal[1] - t[1] * normal[0]
    f2[0] = t2[1] * normal[2] - t2[2] * normal[1]
    f2[1] = t2[2] * normal[0] - t2[0] * normal[2]
    f2[2] = t2[0] * normal[1] - t2[1] * normal[0]
    widest = max(radius, radius2)
    stack = np.empty((256, 4))
    stack[0, 0], stack[0, 1], stack[0, 2], stack[0, 3] = -1.0, 1.0, -1.0, 1.0
    depth = 1
    breaks = np.empty(160)
    while depth > 0:
        depth -= 1
        u0, u1, v0, v1 = stack[depth, 0], stack[depth, 1], stack[depth, 2], stack[depth, 3]
        a = start + 0.5 * (u0 + 1.0) * dp
        b = start2 + 0.5 * (v0 + 1.0) * dq
        da, db = 0.5 * (u1 - u0) * dp, 0.5 * (v1 - v0) * dq
        la, lb = 0.5 * (u1 - u0) * h, 0.5 * (v1 - v0) * h2
        distance, _, _ = _segment_distance(a, da, b, db)
        clear = distance - radius - radius2
        longest = max(la, lb)
        if clear >= 0.8 * longest and distance >= 8.0 * widest:
            n = _gauss_count(2.0 * clear / la, 0.5 * wavenumber * la, order, tolerance)
            n2 = _gauss_count(2.0 * clear / lb, 0.5 * wavenumber * lb, order2, tolerance)
            r = _ring_count(distance / radius, tolerance)
            r2 = _ring_count(distance / radius2, tolerance)
            _separated_panels(
                start, dp, u0, u1, start2, dq, v0, v1, normal, e2, normal, f2, radius, radius2, wavenumber,
                n, n2, r, r2, nodes, weights, out,
            )  # fmt: skip
        elif longest > 4.0 * widest and depth < 250:
            if la >= lb:
                middle = 0.5 * (u0 + u1)
                stack[depth, 0], stack[depth, 1], stack[depth, 2], stack[depth, 3] = u0, middle, v0, v1
                depth += 1
                stack[depth, 0], stack[depth, 1], stack[depth, 2], stack[depth, 3] = middle, u1, v0, v1
            else:
                middle = 0.5 * (v0 + v1)
                stack[depth, 0], stack[depth, 1], stack[depth, 2], stack[depth, 3] = u0, u1, v0, middle
                depth += 1
                stack[depth, 0], stack[depth, 1], stack[depth, 2], stack[depth, 3] = u0, u1, middle, v1
            depth += 1
        else:
            _touching_panels(
                start, dp, u0, u1, start2, dq, v0, v1, normal, e2, radius, radius2, wavenumber,
                touching_points, 2 * touching_points, nodes, weights, breaks, out,
            )  # fmt: skip


@njit(**JIT_OPTIONS)
def angled_moments_all(start, end, start2, end2, radius, radius2, wavenumber, tolerance, touching_points, nodes, weights, out):
    """Fill ``out`` (E, E', p+1, p'+1) with the moments of every pair of elements of two antennas."""
    for i in range(start.shape[0]):
        for j in range(start2.shape[0]):
            angled_moments(
                start[i], end[i], start2[j], end2[j], radius[i], radius2[j], wavenumber,
                tolerance, touching_points, nodes, weights, out[i, j],
            )  # fmt: skip
