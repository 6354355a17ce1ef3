#!/usr/bin/env python3
"""Fresnel integrals, clothoids, NURBS and quintic splines, computed independently with SciPy and mpmath.

What it computes, into curves.json beside this file
    fresnel    z, C(z), S(z): scipy.special.fresnel, checked against mpmath at 40 digits
    clothoids  end poses: mpmath quadrature at 40 digits of cos and sin of the heading, checked against
               scipy.integrate.quad; near a line and near an arc too, and in reverse
    nurbs      span by span: scipy.interpolate.BSpline on homogeneous coordinates, with derivatives by the quotient rule;
               places, headings, curvatures, changes of curvature per metre, and arc lengths by scipy.integrate.quad of
               the speed over each span
    splines    quintics through way-poses: second derivatives from a dense linear system (numpy.linalg.solve) of the
               stated conditions, the curve by scipy.interpolate.BPoly.from_derivatives, arc lengths by quad
    In reverse the heading is the curve's direction turned by pi, and the curvature has the other sign.

Literature
    M. Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, 7.3.
    L. Piegl, W. Tiller, The NURBS Book, 2nd edition, 1997: 4.1 (homogeneous coordinates), 7.3 (quarter circle).

Versions used: Python 3.11, NumPy, SciPy and mpmath as printed into curves.json.

Usage: pip install numpy scipy mpmath; python curves.py   (rewrites curves.json; about ten seconds)
"""

import json
import math
from pathlib import Path

import mpmath as mp
import numpy as np
import scipy
from scipy.integrate import quad
from scipy.interpolate import BPoly, BSpline
from scipy.special import fresnel

mp.mp.dps = 40


def fresnel_table():
    rows = []
    for z in (1e-9, 0.01, 0.25, 0.5, 1.0, 1.5, 2.0, 3.0, 4.9, 5.1, 7.0, 12.5, 100.0):
        s, c = fresnel(z)
        exact = float(mp.fresnelc(z)), float(mp.fresnels(z))
        assert abs(c - exact[0]) < 1e-14 and abs(s - exact[1]) < 1e-14, z
        rows.append({"z": z, "c": exact[0], "s": exact[1]})
    return rows


def clothoid(start, begin, end, length, reverse):
    sign = -1 if reverse else 1
    x0, y0, h0 = (mp.mpf(v) for v in start)
    k0, k1, l = mp.mpf(begin), mp.mpf(end), mp.mpf(length)
    turn = lambda s: h0 + sign * (k0 * s + (k1 - k0) * s * s / (2 * l))
    pieces = mp.linspace(0, l, 2 + int(abs(begin) * length + abs(end) * length))
    x = x0 + sign * mp.quad(lambda s: mp.cos(turn(s)), pieces)
    y = y0 + sign * mp.quad(lambda s: mp.sin(turn(s)), pieces)
    f = lambda s: float(start[2] + sign * (begin * s + (end - begin) * s * s / (2 * length)))
    check = sign * quad(lambda s: math.cos(f(s)), 0, length, epsabs=1e-12, epsrel=1e-12, limit=500)[0]
    assert abs(float(x - x0) - check) < 1e-10, (begin, end, length)
    return {
        "start": list(start),
        "curvature_start_1_m": begin,
        "curvature_end_1_m": end,
        "length_m": length,
        "reverse": reverse,
        "x_m": float(x),
        "y_m": float(y),
        "heading_rad": float(turn(l)),
    }


def clothoid_table():
    origin, away = (0.0, 0.0, 0.0), (1.0, -2.0, 2.5)
    return [
        clothoid(origin, 0.0, 0.5, 5.0, False),  # methods: (kappa0 0, kappa' 0.1, L 5)
        clothoid(origin, 0.2, 0.7, 5.0, False),
        clothoid(origin, 0.0, 5e-9, 5.0, False),  # near a line
        clothoid(origin, 0.5, 0.5 + 1e-12, 5.0, False),  # near an arc
        clothoid(away, -0.3, 0.4, 7.0, False),
        clothoid(away, -0.3, 0.4, 7.0, True),
        clothoid(away, 0.0, 4.0, 20.0, False),  # six turns
        clothoid(away, 1e-7, -1e-6, 300.0, True),
        clothoid(away, 3.0, -3.0, 12.0, False),
        clothoid(away, 0.0, 0.0, 12.0, False),
    ]


def geometry(d1, d2, d3, reverse):
    square = d1 @ d1
    cross = lambda a, b: a[0] * b[1] - a[1] * b[0]
    curvature = cross(d1, d2) / square**1.5
    by_u = cross(d1, d3) / square**1.5 - 3 * curvature * (d1 @ d2) / square
    sign = -1 if reverse else 1
    return {
        "heading_rad": math.atan2(sign * d1[1], sign * d1[0]),
        "curvature_1_m": sign * curvature,
        "curvature_rate_1_m2": sign * by_u / math.sqrt(square),
    }


def nurbs(name, degree, knots, points, weights=None, reverse=False):
    w = np.ones(len(points)) if weights is None else np.array(weights)
    homogeneous = np.column_stack([np.array(points) * w[:, None], w])
    curve = BSpline(np.array(knots), homogeneous, degree, extrapolate=False)

    def jet(u):
        a = [curve(u, nu=k) if k <= degree else np.zeros(3) for k in range(4)]
        p = a[0][:2] / a[0][2]
        d1 = (a[1][:2] - p * a[1][2]) / a[0][2]
        d2 = (a[2][:2] - 2 * d1 * a[1][2] - p * a[2][2]) / a[0][2]
        d3 = (a[3][:2] - 3 * d2 * a[1][2] - 3 * d1 * a[2][2] - p * a[3][2]) / a[0][2]
        return p, d1, d2, d3

    places, length = [], 0.0
    distinct = sorted(set(knots))
    for span in zip(distinct, distinct[1:]):
        speed = lambda u: float(np.linalg.norm(jet(u)[1]))
        for share in (0.0, 0.13, 0.5, 0.77):
            u = span[0] + share * (span[1] - span[0])
            s = quad(speed, span[0], u, epsabs=1e-12, epsrel=1e-12, limit=200)[0] if share else 0.0
            p, d1, d2, d3 = jet(u)
            places.append({"u": u, "s_m": length + s, "x_m": p[0], "y_m": p[1], **geometry(d1, d2, d3, reverse)})
        length += quad(speed, span[0], span[1], epsabs=1e-12, epsrel=1e-12, limit=200)[0]
    return {
        "name": name,
        "degree": degree,
        "knots": list(knots),
        "points": [list(p) for p in points],
        "weights": weights,
        "reverse": reverse,
        "length_m": length,
        "places": places,
    }


def moved(curve, x, y):
    """The same curve elsewhere: computed near the origin, where doubles are finer."""
    curve["points"] = [[p[0] + x, p[1] + y] for p in curve["points"]]
    for place in curve["places"]:
        place["x_m"], place["y_m"] = place["x_m"] + x, place["y_m"] + y
    return curve


def nurbs_table():
    half = math.sqrt(0.5)
    s_curve = [(0, 0), (2, 0), (4, 1), (5, 3), (7, 4), (9, 4)]
    return [
        nurbs("quarter circle", 2, [0, 0, 0, 1, 1, 1], [(1, 0), (1, 1), (0, 1)], [1, half, 1]),
        nurbs("line of degree 1", 1, [0, 0, 1, 1], [(1, 2), (4, 6)]),
        nurbs("cubic, simple knots", 3, [0, 0, 0, 0, 0.25, 0.6, 1, 1, 1, 1], s_curve),
        nurbs("cubic, weighted", 3, [0, 0, 0, 0, 0.25, 0.6, 1, 1, 1, 1], s_curve, [1, 2, 0.5, 1.5, 0.7, 1]),
        nurbs("cubic in reverse", 3, [0, 0, 0, 0, 0.25, 0.6, 1, 1, 1, 1], s_curve, [1, 2, 0.5, 1.5, 0.7, 1], True),
        nurbs(
            "half circle, a knot of multiplicity 2",
            2,
            [0, 0, 0, 0.5, 0.5, 1, 1, 1],
            [(2, 0), (2, 2), (0, 2), (-2, 2), (-2, 0)],
            [1, half, 1, half, 1],
        ),
        nurbs(
            "cubic, a knot of multiplicity 3, smooth",
            3,
            [0, 0, 0, 0, 0.4, 0.4, 0.4, 1, 1, 1, 1],
            [(0, 0), (1, 0), (2, 1), (3, 2), (4, 3), (6, 3), (7, 2)],
        ),
        nurbs("quintic", 5, [0] * 6 + [0.3] + [1] * 6, [(0, 0), (1, 0), (2, 0.3), (3, 1), (4, 2), (4.5, 3), (4.5, 5)]),
        moved(nurbs("far away", 3, [0, 0, 0, 0, 0.5, 1, 1, 1, 1], s_curve[:5]), 4e5, 5e6),
    ]


def spline(name, way, reverse=False):
    """way: (x, y, heading, curvature or None)."""
    sign = -1 if reverse else 1
    n = len(way)
    place = np.array([w[:2] for w in way], float)
    tangent = sign * np.array([(math.cos(w[2]), math.sin(w[2])) for w in way])
    h = []
    for i in range(n - 1):
        chord = place[i + 1] - place[i]
        length = np.linalg.norm(chord)
        off = lambda t: math.atan2(chord[0] * t[1] - chord[1] * t[0], chord @ t)
        a, b = off(tangent[i]), off(tangent[i + 1])
        h.append(length * (1 + (2 * a * a - a * b + 2 * b * b) / 30))
    # Derivatives of the quintic Hermite basis, from SciPy, so that the system is not the program's own algebra.
    def basis(i, order, at_end):
        out = []
        for column in range(6):
            data = np.zeros(6)
            data[column] = 1
            poly = BPoly.from_derivatives([0, h[i]], [data[:3], data[3:]])
            out.append(float(poly.derivative(order)(h[i] if at_end else 0.0)))
        return np.array(out)  # for p0 v0 a0 p1 v1 a1

    matrix, right = np.zeros((n, n)), np.zeros((n, 2))

    def add(row, i, weights, factor):
        for weight, data in ((weights[0], place[i]), (weights[1], tangent[i]), (weights[3], place[i + 1]), (weights[4], tangent[i + 1])):
            right[row] -= factor * weight * data
        matrix[row, i] += factor * weights[2]
        matrix[row, i + 1] += factor * weights[5]

    for i, (_, _, _, curvature) in enumerate(way):
        if curvature is not None:
            matrix[i, i] = 1
            right[i] = sign * curvature * np.array([-tangent[i][1], tangent[i][0]])
        elif i == 0:
            add(i, 0, basis(0, 4, False), 1)
        elif i == n - 1:
            add(i, n - 2, basis(n - 2, 4, True), 1)
        else:
            add(i, i - 1, basis(i - 1, 3, True), 1)
            add(i, i, basis(i, 3, False), -1)
    bend = np.linalg.solve(matrix, right)
    places, length = [], 0.0
    for i in range(n - 1):
        poly = BPoly.from_derivatives(
            [0, h[i]], [np.array([place[i], tangent[i], bend[i]]), np.array([place[i + 1], tangent[i + 1], bend[i + 1]])]
        )
        d = [poly] + [poly.derivative(k) for k in (1, 2, 3)]
        speed = lambda u: float(np.linalg.norm(d[1](u)))
        for share in (0.0, 0.3, 0.5, 0.9):
            u = share * h[i]
            s = quad(speed, 0, u, epsabs=1e-12, epsrel=1e-12)[0] if share else 0.0
            p = poly(u)
            places.append({"s_m": length + s, "x_m": p[0], "y_m": p[1], **geometry(d[1](u), d[2](u), d[3](u), reverse)})
        length += quad(speed, 0, h[i], epsabs=1e-12, epsrel=1e-12)[0]
    return {
        "name": name,
        "points": [list(w) for w in way],
        "reverse": reverse,
        "length_m": length,
        "places": places,
    }


def spline_table():
    circle = [(2 * math.sin(0.4 * i), 2 - 2 * math.cos(0.4 * i), 0.4 * i, None) for i in range(6)]
    yard = [(0, 0, 0, None), (3, 1, 0.7, None), (4, 4, 1.6, None), (2, 6, 2.8, None), (-1, 6.5, 3.1, None)]
    stated = [(0, 0, 0, 0.0), (3, 1, 0.7, 0.25), (4, 4, 1.6, None), (2, 6, 2.8, 0.1), (-1, 6.5, 3.1, 0.0)]
    back = [(x, y, h + math.pi, None if k is None else -k) for x, y, h, k in stated]
    return [
        spline("circle of 2 m", circle),
        spline("yard", yard),
        spline("yard, curvatures stated", stated),
        spline("the same in reverse", back, True),
        spline("two points", [(0, 0, 0, None), (5, 2, 0.3, None)]),
    ]


def main():
    table = {
        "versions": f"NumPy {np.__version__}, SciPy {scipy.__version__}, mpmath {mp.__version__}",
        "fresnel": fresnel_table(),
        "clothoids": clothoid_table(),
        "nurbs": nurbs_table(),
        "splines": spline_table(),
    }
    path = Path(__file__).resolve().parent / "curves.json"
    path.write_text(json.dumps(table, indent=1) + "\n")


if __name__ == "__main__":
    main()
