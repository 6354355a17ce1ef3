#!/usr/bin/env python3
"""Values of the two laws that follow a path: pure pursuit and Stanley's law.

What it computes, all of it from the publications' formulas, written anew
    pursuit        curvature of the arc to the goal point, in single states: the
                   goal is the root of |path(s) - pose| = L_d beyond the state's
                   place on the path, the path by numerical integration (mpmath)
    pursuit_run    closed loop on the line y = 0 (DOP853, rtol 1e-12)
    pursuit_bound  the least L_d/(v tau) at which the linearised loop with dead
                   time is stable: s^2 + exp(-s tau) (2 v/L_d s + 2 v^2/L_d^2)
                   has its first root on the imaginary axis (mpmath)
    stanley        steering angle in single states: the nearest place on the
                   front axle's own path is the root of the along-track offset
    stanley_run    the front axle's offset on a line at a constant speed of the
                   front axle, k_soft = 0, e(0) = 1 m (closed form by mpmath)
    stanley_car    closed loop of the chassis on a line and on an arc (DOP853)
    reverse_poles  eigenvalues of the linearised loop in reverse (NumPy)
    reverse_run    closed loop in reverse on a line (DOP853)

Conventions
    A path begins at (0, 0, 0) and has the curvature kappa_0 + kappa_rate s after
    s metres of way, positive where the machine steers left; `way` is 1 forward,
    -1 in reverse. Offsets are positive to the left.

Versions used: Python 3.11.7, NumPy 2.4.6, SciPy 1.17.1, mpmath 1.4.1.

Literature
    R. C. Coulter, "Implementation of the pure pursuit path tracking algorithm",
    CMU-RI-TR-92-01, 1992.
    G. M. Hoffmann, C. J. Tomlin, M. Montemerlo, S. Thrun, "Autonomous automobile
    trajectory tracking for off-road driving", American Control Conference 2007.
    G. Heredia, A. Ollero, "Stability of autonomous vehicle path tracking with
    pure delays in the control loop", Advanced Robotics 21, 2007 (the delay).

Usage: python laws_steered.py   (rewrites laws_steered.json; a few seconds)
"""

import json
import math
from pathlib import Path

import mpmath as mp
import numpy as np
import scipy
from scipy.integrate import solve_ivp

HERE = Path(__file__).resolve().parent
mp.mp.dps = 30
L = 1.2  # wheelbase, m


def path(k0, rate, way, s):
    """Pose of the chassis point after s metres of way."""
    heading = lambda u: way * (k0 * u + rate * u * u / 2)
    x = way * mp.quad(lambda u: mp.cos(heading(u)), [0, s])
    y = way * mp.quad(lambda u: mp.sin(heading(u)), [0, s])
    return x, y, heading(s)


def pursuit(k0, rate, way, s, pose, distance):
    gap = lambda u: mp.hypot(path(k0, rate, way, u)[0] - pose[0], path(k0, rate, way, u)[1] - pose[1]) - distance
    # March away from the state's place, so that the first crossing is found.
    a = mp.mpf(s)
    assert gap(a) < 0
    while gap(a + distance / 40) < 0:
        a += distance / 40
    goal = path(k0, rate, way, mp.findroot(gap, (a, a + distance / 40), solver="anderson"))
    dx, dy = goal[0] - pose[0], goal[1] - pose[1]
    left = -mp.sin(pose[2]) * dx + mp.cos(pose[2]) * dy
    return 2 * left / distance**2


def stanley(k0, rate, s, pose, k, k_soft, front_speed):
    def front(u):
        x, y, h = path(k0, rate, 1, u)
        return x + L * mp.cos(h), y + L * mp.sin(h), h + mp.atan(L * (k0 + rate * u))

    axle = pose[0] + L * mp.cos(pose[2]), pose[1] + L * mp.sin(pose[2])

    def offset(u):
        x, y, h = front(u)
        dx, dy = axle[0] - x, axle[1] - y
        return mp.cos(h) * dx + mp.sin(h) * dy, -mp.sin(h) * dx + mp.cos(h) * dy

    nearest = mp.findroot(lambda u: offset(u)[0], s)
    cross = offset(nearest)[1]
    psi = front(nearest)[2] - pose[2]
    return psi - mp.atan(k * cross / (k_soft + front_speed)), cross


def pursuit_states():
    rows = []
    for k0, rate, way, s, pose, distance in [
        # Coulter's formula at the goals (1.0, 0.2) and (2.0, -0.5): the line y = 0 seen from beside it.
        (0, 0, 1, 2, (2, -0.2, 0), math.sqrt(1.04)),
        (0, 0, 1, 2, (2, 0.5, 0), math.sqrt(4.25)),
        (0, 0, 1, 1, (1.1, 0.15, -0.2), 0.8),
        (0, 0, -1, 1, (-1.1, 0.15, -0.2), 0.8),
        (0.4, 0, 1, 1.5, tuple(float(c) for c in path(0.4, 0, 1, 1.5)), 0.9),
        (0.4, 0, 1, 1.5, (1.3, 0.5, 0.5), 0.9),
        (-0.5, 0, -1, 1.0, (-0.8, 0.3, 0.4), 0.7),
        (0.1, 0.15, 1, 1.0, (0.9, 0.2, 0.3), 1.0),
        (0.6, -0.3, 1, 1.0, (1.05, 0.2, 0.45), 0.75),
        (-0.2, 0.25, -1, 1.0, (-0.95, 0.05, 0.0), 0.8),
    ]:
        rows.append(
            {
                "curvature_start_1_m": k0,
                "curvature_rate_1_m2": rate,
                "way": way,
                "s_m": s,
                "pose": [float(c) for c in pose],
                "lookahead_m": distance,
                "curvature_1_m": float(pursuit(k0, rate, way, s, pose, distance)),
            }
        )
    return rows


def stanley_states():
    rows = []
    for k0, rate, s, pose, speed in [
        (0, 0, 1, (1.0, 0.3, 0.0), 1.0),
        (0, 0, 1, (1.2, -0.4, 0.5), 0.3),
        (0, 0, 1, (0.8, -0.1, 0.2), 2.0),
        (0.4, 0, 1.5, tuple(float(c) for c in path(0.4, 0, 1, 1.5)), 1.0),
        (0.4, 0, 1.5, (1.3, 0.7, 0.5), 1.0),
        (-0.5, 0, 1.0, (0.8, -0.1, -0.6), 0.8),
        # Ahead of the place at which the reference is, so that the nearest place lies on the way ahead.
        (0.1, 0.15, 1.0, (1.3, 0.2, 0.3), 1.0),
        (0.6, -0.3, 1.0, (1.2, 0.5, 0.7), 0.6),
    ]:
        steer, cross = stanley(k0, rate, s, pose, 2.5, 0.4, speed)
        rows.append(
            {
                "curvature_start_1_m": k0,
                "curvature_rate_1_m2": rate,
                "s_m": s,
                "pose": [float(c) for c in pose],
                "front_speed_m_s": speed,
                "k": 2.5,
                "k_soft": 0.4,
                "front_offset_m": float(cross),
                "steer_rad": float(steer),
            }
        )
    return rows


def run(right, start, times):
    solution = solve_ivp(right, (0, times[-1]), start, "DOP853", times, rtol=1e-12, atol=1e-14)
    assert solution.success
    return [{"t_s": t, "state": [float(v) for v in state]} for t, state in zip(times, solution.y.T)]


def pursuit_run():
    distance, speed, start = 1.0, 0.8, [0.0, 0.4, 0.3]

    def right(_, q):
        # The goal on y = 0, distance away.
        dx, dy = math.sqrt(distance**2 - q[1] ** 2), -q[1]
        left = -math.sin(q[2]) * dx + math.cos(q[2]) * dy
        return [speed * math.cos(q[2]), speed * math.sin(q[2]), speed * 2 * left / distance**2]

    states = run(right, start, [0.5, 1.0, 2.0, 4.0])
    return {"lookahead_m": distance, "speed_m_s": speed, "start": start, "states": states}


def pursuit_bound():
    # With L_d/v = 1 s: -w^2 + exp(-i w tau)(2 i w + 2) = 0; |w^2| = |2 + 2 i w| gives w, the argument gives tau.
    w = mp.findroot(lambda w: w**4 - 4 - 4 * w**2, 2)
    tau = mp.atan(w) / w
    assert abs(-(w**2) + mp.exp(-1j * w * tau) * (2j * w + 2)) < mp.mpf(10) ** -20
    return float(1 / tau)


def stanley_run():
    # e' = -v sin(atan(k e / v)) = -k e / sqrt(1 + (k e/v)^2); with u = k e / v the integral is
    # sqrt(1 + u^2) - atanh(1 / sqrt(1 + u^2)) = const - k t.
    k, v = mp.mpf("2.5"), mp.mpf(3)
    integral = lambda e: mp.sqrt(1 + (k * e / v) ** 2) - mp.atanh(1 / mp.sqrt(1 + (k * e / v) ** 2))
    states = []
    for t in ["0.25", "0.5", "1", "2"]:
        e = mp.findroot(lambda e: integral(e) - integral(mp.mpf(1)) + k * mp.mpf(t), (mp.mpf("1e-3"), mp.mpf(1)), solver="anderson")
        states.append({"t_s": float(t), "e_m": float(e)})
    return {"k": float(k), "front_speed_m_s": float(v), "states": states}


def stanley_car():
    """The chassis, its front axle driven to its path at a constant chassis speed."""
    k, k_soft, speed = 1.5, 0.5, 1.0
    cases = []
    for bend, start in [(0.0, [0.0, 0.5, -0.3]), (0.25, [0.0, 0.4, 0.1])]:

        def right(_, q, bend=bend):
            x, y, h = q[0] + L * math.cos(q[2]), q[1] + L * math.sin(q[2]), q[2]
            if bend == 0:
                cross, tangent = y, 0.0
            else:
                radius = math.hypot(1 / bend, L)
                cross = radius - math.hypot(x, y - 1 / bend)
                tangent = math.atan2(x, 1 / bend - y)
            # The front axle's speed hangs on the steering; the law takes the one in force, which is its own.
            steer = 0.0
            for _ in range(200):
                front = speed / math.cos(steer)
                steer = math.remainder(tangent - h, 2 * math.pi) - math.atan(k * cross / (k_soft + front))
            return [speed * math.cos(h), speed * math.sin(h), speed * math.tan(steer) / L]

        states = run(right, start, [0.5, 1.0, 2.0, 4.0])
        cases.append({"curvature_1_m": bend, "k": k, "k_soft": k_soft, "speed_m_s": speed, "start": start, "states": states})
    return cases


def reverse_poles():
    rows = []
    for damping, speed in [(1 / math.sqrt(2), 0.5), (0.8, 1.0), (1.0, 0.3)]:
        g = 1 / (4 * damping**2 * L)
        # e' = -u p; p' = -(u/L)(p - g e).
        poles = np.linalg.eigvals([[0, -speed], [speed * g / L, -speed / L]])
        pole = max(poles, key=lambda p: p.imag)
        rows.append({"damping": damping, "speed_m_s": speed, "real_1_s": pole.real, "imag_1_s": abs(pole.imag)})
    return rows


def reverse_run():
    damping, speed, start = 0.8, 0.6, [0.0, 0.5, 0.2]
    g = 1 / (4 * damping**2 * L)

    def right(_, q):
        steer = q[2] - math.atan(g * q[1])
        return [-speed * math.cos(q[2]), -speed * math.sin(q[2]), -speed * math.tan(steer) / L]

    return {"damping": damping, "speed_m_s": speed, "start": start, "states": run(right, start, [1.0, 2.0, 4.0, 8.0])}


def main():
    values = {
        "versions": f"NumPy {np.__version__}, SciPy {scipy.__version__}, mpmath {mp.__version__}",
        "wheelbase_m": L,
        "pursuit": pursuit_states(),
        "pursuit_run": pursuit_run(),
        "pursuit_bound": pursuit_bound(),
        "stanley": stanley_states(),
        "stanley_run": stanley_run(),
        "stanley_car": stanley_car(),
        "reverse_poles": reverse_poles(),
        "reverse_run": reverse_run(),
    }
    (HERE / "laws_steered.json").write_text(json.dumps(values, indent=1) + "\n")


if __name__ == "__main__":
    main()
