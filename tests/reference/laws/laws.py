#!/usr/bin/env python3
"""Closed-form tracking laws, computed independently with mpmath, NumPy, SciPy and python-control.

Outputs, beside this file
    check_values.json  single evaluations of the laws (mpmath, 30 digits)
    poles.json         poles of each law's closed loop, linearised about the
                       reference (complex-step Jacobian, numpy.linalg.eigvals)
    riccati.json       gains of the quadratic regulator: steady ones
                       (scipy.linalg.solve_discrete_are; control.dlqr must give
                       the same), and time-varying ones (backward recursion step
                       by step, error models discretised with scipy.linalg.expm)

Conventions
    Robot-frame error e = reference - pose, in the robot's frame. For the closed
    loop the reference is the frame: the relative pose (x, y, h) obeys
    x' = w_d y + v cos h - v_d, y' = -w_d x + v sin h, h' = w - w_d.

Versions used: Python 3.11.7, NumPy 2.4.6, SciPy 1.17.1, python-control 0.10.2, mpmath 1.4.1.

Literature
    Y. Kanayama, Y. Kimura, F. Miyazaki, T. Noguchi, IEEE ICRA 1990.
    A. De Luca, G. Oriolo, C. Samson, "Feedback control of a nonholonomic
    car-like robot", Springer LNCIS 229, 1998 (linear, nonlinear).
    P. Morin, C. Samson, Springer Handbook of Robotics, chapter 34, 2008.
    G. Oriolo, A. De Luca, M. Vendittelli, IEEE TCST 10(6), 2002 (dynamic).

Usage: pip install numpy scipy control mpmath; python laws.py   (a few seconds)
"""

import json
import math
from pathlib import Path

import control
import mpmath as mp
import numpy as np
from scipy.linalg import expm, solve_discrete_are

HERE = Path(__file__).resolve().parent


def dump(name, value):
    (HERE / name).write_text(json.dumps(value, indent=1) + "\n")


# ---------------------------------------------------------------- laws
# Each is a function (pose, reference pose, v_d, w_d, gains, m) -> (v, w), with m the
# elementary functions: mpmath's for values, NumPy's complex ones for Jacobians.


def robot_error(p, r, m):
    c, s = m.cos(p[2]), m.sin(p[2])
    dx, dy = r[0] - p[0], r[1] - p[1]
    return c * dx + s * dy, -s * dx + c * dy, r[2] - p[2]


def kanayama(p, r, vd, wd, g, m):
    ex, ey, eh = robot_error(p, r, m)
    return (vd * m.cos(eh) + g["k_x"] * ex,
            wd + vd * g["k_y"] * ey + abs(vd) * g["k_heading"] * m.sin(eh))


def samson(p, r, vd, wd, g, m):
    c, s = m.cos(r[2]), m.sin(r[2])
    x = c * (p[0] - r[0]) + s * (p[1] - r[1])
    y = -s * (p[0] - r[0]) + c * (p[1] - r[1])
    h = p[2] - r[2]
    t = m.sin(h) / m.cos(h)
    return ((vd - g["k_1"] * abs(vd) * (x + y * t)) / m.cos(h),
            wd - (g["k_2"] * vd * y + g["k_3"] * abs(vd) * t) * m.cos(h) ** 2)


def linear(p, r, vd, wd, g, m):
    ex, ey, eh = robot_error(p, r, m)
    a = m.sqrt(wd * wd + g["b"] * vd * vd)
    k1 = 2 * g["zeta"] * a
    k2 = 0 if vd == 0 else (a * a - wd * wd) / abs(vd) * (1 if vd > 0 else -1)
    return vd * m.cos(eh) + k1 * ex, wd + k2 * ey + k1 * eh


def nonlinear(p, r, vd, wd, g, m):
    ex, ey, eh = robot_error(p, r, m)
    k = 2 * g["zeta"] * m.sqrt(wd * wd + g["b"] * vd * vd)
    ratio = 1 if eh == 0 else m.sin(eh) / eh
    return vd * m.cos(eh) + k * ex, wd + g["b"] * vd * ratio * ey + k * eh


def off_axle(p, r, vd, wd, g, m):
    def point(q):
        c, s = m.cos(q[2]), m.sin(q[2])
        arm = (c * g["x_p_m"] - s * g["y_p_m"], s * g["x_p_m"] + c * g["y_p_m"])
        return (q[0] + arm[0], q[1] + arm[1]), arm

    (tx, ty), arm = point(r)
    (ax, ay), _ = point(p)
    rate = (vd * m.cos(r[2]) - wd * arm[1], vd * m.sin(r[2]) + wd * arm[0])
    ux, uy = rate[0] + g["k_p"] * (tx - ax), rate[1] + g["k_p"] * (ty - ay)
    c, s = m.cos(p[2]), m.sin(p[2])
    bx, by = c * ux + s * uy, -s * ux + c * uy
    return bx + g["y_p_m"] / g["x_p_m"] * by, by / g["x_p_m"]


def dynamic(p, r, vd, wd, xi, g, m):
    """(xi', w) of a reference with constant (v_d, w_d)."""
    want = (vd * m.cos(r[2]), vd * m.sin(r[2]))
    have = (xi * m.cos(p[2]), xi * m.sin(p[2]))
    acc = (-vd * wd * m.sin(r[2]), vd * wd * m.cos(r[2]))
    u = [acc[i] + g["k_d"] * (want[i] - have[i]) + g["k_p"] * (r[i] - p[i]) for i in (0, 1)]
    c, s = m.cos(p[2]), m.sin(p[2])
    return u[0] * c + u[1] * s, (u[1] * c - u[0] * s) / xi


STATIC = {"kanayama": kanayama, "samson": samson, "linear": linear, "nonlinear": nonlinear,
          "off-axle": off_axle}


# ---------------------------------------------------------------- single values


def values():
    mp.mp.dps = 30
    e = [mp.mpf("0.1"), mp.mpf("-0.05"), mp.mpf("0.2")]
    origin = (mp.mpf(0), mp.mpf(0), mp.mpf(0))
    cases = [
        ("kanayama", {"k_x": 10, "k_y": 64, "k_heading": 16}),
        ("samson", {"k_1": 1, "k_2": 1, "k_3": 1}),
        # a = 1 rad/s: b = (1 - 0.2^2)/0.5^2
        ("linear", {"zeta": "0.7", "b": "3.84"}),
        ("nonlinear", {"zeta": "0.7", "b": 10}),
    ]
    out = []
    for law, gains in cases:
        g = {k: mp.mpf(x) for k, x in gains.items()}
        for sign in (1, -1):
            v, w = STATIC[law](origin, e, sign * mp.mpf("0.5"), mp.mpf("0.2"), g, mp)
            out.append({"law": law, "gains": {k: float(x) for k, x in g.items()},
                        "ref_speed_m_s": 0.5 * sign, "ref_turn_rate_rad_s": 0.2,
                        "speed_m_s": float(v), "turn_rate_rad_s": float(w)})
    # u = (0.1, -0.2) m/s^2 in the site frame, heading 0.3, speed 0.5
    u1, u2, h, xi = mp.mpf("0.1"), mp.mpf("-0.2"), mp.mpf("0.3"), mp.mpf("0.5")
    accel = u1 * mp.cos(h) + u2 * mp.sin(h)
    turn = (u2 * mp.cos(h) - u1 * mp.sin(h)) / xi
    dump("check_values.json", {
        "robot_frame_error": {"e_x_m": 0.1, "e_y_m": -0.05, "e_heading_rad": 0.2},
        "laws": out,
        "dynamic": {"speed_m_s": 0.5, "heading_rad": 0.3, "u_x_m_s2": 0.1, "u_y_m_s2": -0.2,
                    "accel_m_s2": float(accel), "turn_rate_rad_s": float(turn)},
    })


# ---------------------------------------------------------------- poles


def jacobian(rate, at):
    n, step = len(at), 1e-30
    columns = []
    for i in range(n):
        z = np.array(at, dtype=complex)
        z[i] += 1j * step
        columns.append(np.imag(np.array(rate(z))) / step)
    return np.array(columns).T


def loop(law, vd, wd, g):
    origin = (0.0, 0.0, 0.0)

    def motion(z, v, w):
        return (wd * z[1] + v * np.cos(z[2]) - vd, -wd * z[0] + v * np.sin(z[2]), w - wd)

    if law != "dynamic":
        return lambda z: motion(z, *STATIC[law](z, origin, vd, wd, g, np)), origin

    def rate(z):
        accel, w = dynamic(z, origin, vd, wd, z[3], g, np)
        return (*motion(z, z[3], w), accel)

    return rate, (*origin, vd)


def poles():
    gains = {
        "kanayama": [{"k_x": 1.0, "k_y": 4.0, "k_heading": 4.0}, {"k_x": 3.0, "k_y": 20.0, "k_heading": 5.0}],
        "samson": [{"k_1": 1.0, "k_2": 4.0, "k_3": 4.0}, {"k_1": 2.5, "k_2": 9.0, "k_3": 4.2}],
        "linear": [{"b": 4.0, "zeta": 1.0}, {"b": 9.0, "zeta": 0.6}],
        "nonlinear": [{"b": 4.0, "zeta": 1.0}, {"b": 9.0, "zeta": 0.6}],
        "dynamic": [{"k_p": 1.0, "k_d": 2.0}, {"k_p": 4.0, "k_d": 2.4}],
    }
    motions = [(0.5, 0.0), (0.5, 0.2), (-0.4, 0.0), (-0.4, 0.3), (1.2, -0.7)]
    out = []
    for law, sets in gains.items():
        for g in sets:
            for vd, wd in motions + ([(0.0, 0.5)] if law in ("linear", "nonlinear") else []):
                a = jacobian(*loop(law, vd, wd, g))
                found = sorted(np.linalg.eigvals(a), key=lambda p: (p.real, p.imag))
                out.append({"law": law, "gains": g, "ref_speed_m_s": vd, "ref_turn_rate_rad_s": wd,
                            "poles": [[float(p.real), float(p.imag)] for p in found]})
    for g in ({"x_p_m": 0.3, "y_p_m": 0.0, "k_p": 1.5}, {"x_p_m": 0.4, "y_p_m": 0.1, "k_p": 2.0}):
        for vd, wd in ((0.5, 0.0), (0.6, 0.3)):
            a = jacobian(*loop("off-axle", vd, wd, g))
            found = sorted(np.linalg.eigvals(a), key=lambda p: (p.real, p.imag))
            out.append({"law": "off-axle", "gains": g, "ref_speed_m_s": vd, "ref_turn_rate_rad_s": wd,
                        "poles": [[float(p.real), float(p.imag)] for p in found]})
    # the design's own polynomial: (s + 2 zeta a)(s^2 + 2 zeta a s + a^2)
    for case in out:
        if case["law"] in ("linear", "nonlinear"):
            g, vd, wd = case["gains"], case["ref_speed_m_s"], case["ref_turn_rate_rad_s"]
            a = math.sqrt(wd * wd + g["b"] * vd * vd)
            z = g["zeta"]
            wanted = np.polymul([1, 2 * z * a], [1, 2 * z * a, a * a])
            have = np.poly([complex(*p) for p in case["poles"]])
            assert np.allclose(have, wanted, rtol=1e-7, atol=1e-9), case
    dump("poles.json", out)


# ---------------------------------------------------------------- riccati


def held(v, w, seconds):
    """The robot-frame error model over a time in which the correction is held."""
    a = np.array([[0.0, w, 0.0], [-w, 0.0, v], [0.0, 0.0, 0.0]])
    b = np.array([[-1.0, 0.0], [0.0, 0.0], [0.0, -1.0]])
    f = expm(np.block([[a, b], [np.zeros((2, 5))]]) * seconds)
    return f[:3, :3], f[:3, 3:]


def backward(p, a, b, q, r):
    k = np.linalg.solve(r + b.T @ p @ b, b.T @ p @ a)
    p = q + a.T @ p @ (a - b @ k)
    return 0.5 * (p + p.T), k


def weights(g):
    return (np.diag([g["q_along"], g["q_cross"], g["q_heading"]]),
            np.diag([g["r_speed"], g["r_turn_rate"]]))


def steady():
    out = []
    for g in ({"q_along": 4.0, "q_cross": 10.0, "q_heading": 1.0, "r_speed": 1.0, "r_turn_rate": 1.0},
              {"q_along": 1.0, "q_cross": 2.0, "q_heading": 0.5, "r_speed": 0.5, "r_turn_rate": 0.2}):
        for vd, wd in ((1.0, 0.0), (0.5, 0.2), (-0.4, 0.3), (0.3, -0.9), (2.0, 0.0)):
            for period in (0.02, 0.01):
                q, r = weights(g)
                a, b = held(vd, wd, period)
                p = solve_discrete_are(a, b, q * period, r * period)
                k = np.linalg.solve(r * period + b.T @ p @ b, b.T @ p @ a)
                other, _, _ = control.dlqr(a, b, q * period, r * period)
                assert np.allclose(k, other, rtol=1e-9, atol=1e-11)
                out.append({"gains": g, "ref_speed_m_s": vd, "ref_turn_rate_rad_s": wd, "period_s": period,
                            "k": k.tolist()})
    return out


def motion(case, t):
    """Speed and turn rate ahead: m/s and rad/s."""
    return (case["speed"][0] + case["speed"][1] * t + case["speed"][2] * math.sin(t),
            case["turn_rate"][0] + case["turn_rate"][1] * t + case["turn_rate"][2] * math.sin(2.0 * t))


def varying():
    """The same stages as the law's: one of a period, then steps, each with the motion in its middle; beyond them
    ten seconds, or up to the next power of two of steps, with the mean motion of the steps."""
    out = []
    g = {"q_along": 4.0, "q_cross": 10.0, "q_heading": 1.0, "r_speed": 1.0, "r_turn_rate": 1.0}
    for speed, turn in (((0.5, 0.0, 0.0), (0.0, 0.0, 0.8)), ((0.9, -0.3, 0.0), (0.2, 0.1, 0.0)),
                        ((-0.6, 0.1, 0.1), (-0.3, 0.0, 0.4)), ((0.0, 0.25, 0.0), (0.4, -0.2, 0.0))):
        for period, step, horizon in ((0.02, 0.05, 2.0), (0.01, 0.1, 3.0)):
            case = {"gains": {**g, "step_s": step, "horizon_s": horizon}, "speed": speed, "turn_rate": turn,
                    "period_s": period}
            q, r = weights(g)
            steps = math.ceil(horizon / step - 1e-9)
            ahead = [motion(case, period + (i + 0.5) * step) for i in range(steps)]
            mean = sum(abs(v) for v, _ in ahead) / steps
            v_tail = math.copysign(mean, ahead[-1][0])
            w_tail = sum(w for _, w in ahead) / steps
            a, b = held(v_tail, w_tail, step)
            p = np.zeros((3, 3))
            for _ in range(2 ** math.ceil(math.log2(10.0 / step))):
                p, _ = backward(p, a, b, q * step, r * step)
            for v, w in reversed(ahead):
                p, _ = backward(p, *held(v, w, step), q * step, r * step)
            _, k = backward(p, *held(*motion(case, 0.5 * period), period), q * period, r * period)
            out.append({**case, "k": k.tolist()})
    return out


def main():
    values()
    poles()
    # The lateral chain alone, as it is published for v = 1, q = (10, 1), r = 1: K = [sqrt q1, sqrt(q2 + 2 v sqrt q1)]
    # in continuous time; held for 20 ms it is a little less.
    a, b = held(1.0, 0.0, 0.02)
    p = solve_discrete_are(a[1:, 1:], b[1:, 1:], np.diag([10.0, 1.0]) * 0.02, np.eye(1) * 0.02)
    k = np.linalg.solve(0.02 + b[1:, 1:].T @ p @ b[1:, 1:], b[1:, 1:].T @ p @ a[1:, 1:])
    dump("riccati.json", {"lateral_20_ms": k[0].tolist(), "steady": steady(), "varying": varying()})


if __name__ == "__main__":
    main()
