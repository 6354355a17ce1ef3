#!/usr/bin/env python3
"""Time-optimal timings of five plans by a general solver, as values to test `fieldbook retime` against.

    python3 -m venv V && V/bin/pip install casadi numpy
    V/bin/python tests/reference/retime/retime_optima.py          # writes the plans, site files and optima.json

The problem in its convex form (Verscheure, Demeulenaere, Swevers, De Schutter, Diehl, IEEE Transactions on Automatic
Control 54(10), 2009): along the path with distance s, x = (ds/dt)^2 and u = x'/2 are found so that the integral of
1/sqrt(x) is least. Every limit is written down here by hand from the machine's kinematics; nothing of the project is
used. Solver: IPOPT, as it comes with CasADi. Each piece of path has its own fine grid; the limits are kept at both ends
and in the middle of each cell, exactly (no room for anything).

The same five with a jerk limit: unknown are the speeds at the nodes, and between the middles of two neighbouring cells the
acceleration changes by no more than the jerk allows in the time between. That is not convex: what IPOPT finds is a local
optimum, and the grid is coarser.
"""

import json
import math
import pathlib
import sys

import casadi
import numpy as np

HERE = pathlib.Path(__file__).resolve().parent
SHARE = 0.8  # a reserve of 0.2
JERK = 2.0  # m/s^3, along the path

DIFFERENTIAL = {
    "kind": "differential",
    "wheel_radius_m": 0.1,
    "track_width_m": 0.5,
    "max_wheel_speed_rad_s": 12.0,
    "max_wheel_accel_rad_s2": 15.0,
}
CAR = {
    "kind": "car",
    "wheelbase_m": 1.2,
    "max_speed_m_s": 2.5,
    "max_accel_m_s2": 1.2,
    "max_decel_m_s2": 2.0,
    "max_steer_rad": 0.57,
    "max_steer_rate_rad_s": 0.5,
}
LATERAL = {"max_lateral_accel_m_s2": 0.6}


def clothoid(k0, k1, length):
    return {"kind": "clothoid", "curvature_start_1_m": k0, "curvature_end_1_m": k1, "length_m": length}


def line(length):
    return {"kind": "line", "length_m": length}


def arc(radius, turn):
    return {"kind": "arc", "radius_m": radius, "turn_rad": turn}


def bend(k, ramp, turn):
    """A bend of `turn` rad in all, with clothoids in and out."""
    sign = math.copysign(1.0, turn)
    rest = abs(turn) - k * ramp
    return [clothoid(0.0, sign * k, ramp), arc(1.0 / k, sign * rest), clothoid(sign * k, 0.0, ramp)]


CASES = {
    "long-line-differential": (DIFFERENTIAL, [line(60.0)]),
    # Both lobes of an eight, and straight through its middle.
    "eight-differential": (
        DIFFERENTIAL | LATERAL,
        [line(1.0), *bend(0.6, 1.2, 1.5 * math.pi), line(2.0), *bend(0.6, 1.2, -1.5 * math.pi), line(1.0)],
    ),
    # So tight that the inner wheel runs backwards in the middle: its factor passes zero twice.
    "tight-clothoids-differential": (
        DIFFERENTIAL,
        [line(0.8), clothoid(0.0, 5.5, 0.6), clothoid(5.5, -3.0, 0.9), clothoid(-3.0, 0.0, 0.5), line(1.5)],
    ),
    # Arcs joined by clothoids: the steering rate decides on these, braking is stronger than speeding up.
    "arcs-and-clothoids-car": (
        CAR,
        [
            line(5.0),
            *bend(0.4, 0.8, 0.5 * math.pi),
            line(3.0),
            clothoid(0.0, -0.3, 0.6),
            arc(1.0 / 0.3, -0.6),
            clothoid(-0.3, 0.5, 1.5),
            arc(2.0, 0.9),
            clothoid(0.5, 0.0, 0.7),
            line(4.0),
        ],
    ),
    "s-bend-lateral-car": (CAR | LATERAL, [line(6.0), *bend(0.3, 2.0, 1.2), *bend(0.3, 2.0, -1.2), line(6.0)]),
}


def length_of(piece):
    return piece["radius_m"] * abs(piece["turn_rad"]) if piece["kind"] == "arc" else piece["length_m"]


def curvature_of(piece, s):
    if piece["kind"] == "line":
        return 0.0 * s, 0.0 * s
    if piece["kind"] == "arc":
        return math.copysign(1.0 / piece["radius_m"], piece["turn_rad"]) + 0.0 * s, 0.0 * s
    k0, k1 = piece["curvature_start_1_m"], piece["curvature_end_1_m"]
    rate = (k1 - k0) / piece["length_m"]
    return k0 + rate * s, rate + 0.0 * s


def speed_square_bound(m, k, dk):
    """Greatest x within the share of every limit on speeds."""
    if m["kind"] == "differential":
        rim = m["wheel_radius_m"] * m["max_wheel_speed_rad_s"] * SHARE
        bound = (rim / (1.0 + np.abs(k) * m["track_width_m"] / 2)) ** 2
    else:
        assert np.all(np.abs(np.arctan(m["wheelbase_m"] * k)) <= m["max_steer_rad"])
        bound = np.full_like(k, (SHARE * m["max_speed_m_s"]) ** 2)
        steer_rate_per_m = m["wheelbase_m"] * np.abs(dk) / (1.0 + (m["wheelbase_m"] * k) ** 2)
        turning = steer_rate_per_m > 0
        bound[turning] = np.minimum(
            bound[turning], (SHARE * m["max_steer_rate_rad_s"] / steer_rate_per_m[turning]) ** 2
        )
    lateral = m.get("max_lateral_accel_m_s2")
    if lateral is not None:
        bound = np.minimum(bound, SHARE * lateral / np.maximum(np.abs(k), 1e-12))
    return bound


def acceleration_rows(m, k, dk):
    """Rows (a, b, low, high): low <= a u + b x <= high."""
    if m["kind"] == "differential":
        reach = m["wheel_radius_m"] * m["max_wheel_accel_rad_s2"] * SHARE
        half = m["track_width_m"] / 2
        return [(1.0 + s * k * half, s * dk * half, -reach, reach) for s in (1.0, -1.0)]
    return [(1.0 + 0.0 * k, 0.0 * k, -m["max_decel_m_s2"] * SHARE, m["max_accel_m_s2"] * SHARE)]


def grid_of(piece, step):
    """Even cells, with ever shorter ones towards both ends: there a path begins and ends at rest."""
    length = length_of(piece)
    count = max(60, int(math.ceil(length / step)))
    even = np.linspace(0.0, length, count + 1)
    graded = length / count * 0.5 ** np.arange(1, 12)
    return np.unique(np.concatenate([even, graded, length - graded]))


def optimum(m, pieces, step):
    cells, bound = [], [math.inf]
    for piece in pieces:
        s = grid_of(piece, step)
        begin, end = s[:-1], s[1:]
        first = len(bound) - 1
        for part in (0.0, 0.5, 1.0):
            k, dk = curvature_of(piece, begin + part * (end - begin))
            cells.append((first, part, end - begin, acceleration_rows(m, k, dk)))
        node = speed_square_bound(m, *curvature_of(piece, s))
        bound[-1] = min(bound[-1], node[0])
        bound.extend(node[1:])
    count = len(bound)
    upper = np.array(bound)
    lower = np.full(count, 1e-9)
    lower[0] = lower[-1] = upper[0] = upper[-1] = 0.0
    x = casadi.MX.sym("x", count)
    cost, rows, low, high = 0, [], [], []
    for first, part, lengths, limits in cells:
        n = len(lengths)
        here, there = x[first : first + n], x[first + 1 : first + n + 1]
        u = (there - here) / (2.0 * casadi.DM(lengths))
        if part == 0.0:
            # At the ends of the path x is 0: a constant, so that no root has an endless slope.
            root = lambda part_of_x, index: casadi.vertcat(
                *[0.0 if i in (0, count - 1) else casadi.sqrt(part_of_x[i - index]) for i in range(index, index + n)]
            )
            cost += casadi.sum1(2.0 * casadi.DM(lengths) / (root(here, first) + root(there, first + 1)))
        for a, b, least, greatest in limits:
            rows.append(casadi.DM(a) * u + casadi.DM(b) * (here + part * (there - here)))
            low.extend([least] * n)
            high.extend([greatest] * n)
    problem = {"x": x, "f": cost, "g": casadi.vertcat(*rows)}
    options = {"ipopt.print_level": 0, "print_time": 0, "ipopt.tol": 1e-9, "ipopt.max_iter": 2000}
    solver = casadi.nlpsol("solver", "ipopt", problem, options)
    start = np.clip(0.1 * np.minimum(upper, 1.0), lower, upper)
    found = solver(x0=start, lbx=lower, ubx=upper, lbg=low, ubg=high)
    assert solver.stats()["success"], solver.stats()["return_status"]
    return float(found["f"]), count


def graded(piece, step, is_first, is_last):
    """Even cells; at a rest lengths that grow as the third power, as the way does under constant jerk."""
    length = length_of(piece)
    even = np.linspace(0.0, length, max(30, int(math.ceil(length / step))) + 1)

    def from_rest(nodes):
        way, count = min(0.3, length / 3), 25
        return np.concatenate([[0.0], way * (np.arange(1, count) / count) ** 3, [way], nodes[nodes > way + 1e-9]])

    nodes = from_rest(even) if is_first else even
    return length - from_rest(length - nodes[::-1])[::-1] if is_last else nodes


def optimum_with_jerk(m, pieces, step):
    cells, bound, lengths = [], [math.inf], []
    for index, piece in enumerate(pieces):
        s = graded(piece, step, index == 0, index == len(pieces) - 1)
        begin, end = s[:-1], s[1:]
        first = len(bound) - 1
        for part in (0.0, 0.5, 1.0):
            cells.append((first, part, acceleration_rows(m, *curvature_of(piece, begin + part * (end - begin)))))
        node = speed_square_bound(m, *curvature_of(piece, s))
        bound[-1] = min(bound[-1], node[0])
        bound.extend(node[1:])
        lengths.extend(end - begin)
    count, h = len(bound), np.array(lengths)
    upper, lower = np.sqrt(np.array(bound)), np.full(count, 1e-6)
    lower[0] = lower[-1] = upper[0] = upper[-1] = 0.0
    v = casadi.MX.sym("v", count)
    seconds = 2.0 * casadi.DM(h) / (v[:-1] + v[1:])
    x = v * v
    a = (x[1:] - x[:-1]) / (2.0 * casadi.DM(h))
    rows, low, high = [], [], []
    for first, part, limits in cells:
        n = limits[0][0].shape[0]
        u, here, there = a[first : first + n], x[first : first + n], x[first + 1 : first + n + 1]
        for factor, curving, least, greatest in limits:
            rows.append(casadi.DM(factor) * u + casadi.DM(curving) * (here + part * (there - here)))
            low.extend([least] * n)
            high.extend([greatest] * n)
    between = 0.5 * JERK * (seconds[1:] + seconds[:-1])
    change = a[1:] - a[:-1]
    # At a rest the acceleration begins and ends at 0.
    ends = [a[0] - 0.5 * JERK * seconds[0], -a[-1] - 0.5 * JERK * seconds[-1]]
    for row in [change - between, -change - between, casadi.vertcat(*ends)]:
        rows.append(row)
        low.extend([-1e9] * row.shape[0])
        high.extend([0.0] * row.shape[0])
    problem = {"x": v, "f": casadi.sum1(seconds), "g": casadi.vertcat(*rows)}
    options = {"ipopt.print_level": 0, "print_time": 0, "ipopt.tol": 1e-7, "ipopt.max_iter": 3000}
    solver = casadi.nlpsol("solver", "ipopt", problem, options)
    s = np.concatenate([[0.0], np.cumsum(h)])
    start = np.clip(0.4 * np.minimum(0.5, np.minimum(s, s[-1] - s) ** (2 / 3)), lower, upper)
    found = solver(x0=start, lbx=lower, ubx=upper, lbg=low, ubg=high)
    assert solver.stats()["success"], solver.stats()["return_status"]
    return float(found["f"])


def write_inputs(name, machine, pieces):
    keys = "\n".join(f"{key} = {json.dumps(value)}" for key, value in machine.items())
    (HERE / f"{name}.site.toml").write_text(
        f'# Made by retime_optima.py.\n[vehicle]\n{keys}\n\n[law]\nname = "kanayama"\n\n[net]\nlisten = "127.0.0.1:4710"\n'
    )
    # A slow constant speed, for retime to replace.
    segments = ",\n  ".join(json.dumps(piece | {"speed_m_s": 0.05}) for piece in pieces)
    (HERE / f"{name}.plan.json").write_text(
        f'{{"format": "trackhold-plan/1", "id": "{name}", "revision": 1,\n'
        f' "start": {{"x_m": 0.0, "y_m": 0.0, "heading_rad": 0.0}},\n "segments": [\n  {segments}]}}\n'
    )


def main():
    table = []
    for name, (machine, pieces) in CASES.items():
        write_inputs(name, machine, pieces)
        coarse, _ = optimum(machine, pieces, 0.02)
        fine, nodes = optimum(machine, pieces, 0.01)
        print(f"{name}: {fine:.6f} s on {nodes} nodes, {coarse:.6f} s with twice the step", file=sys.stderr)
        smooth = [optimum_with_jerk(machine, pieces, step) for step in (0.08, 0.04)]
        print(f"{name}: with a jerk limit {smooth[1]:.4f} s, {smooth[0]:.4f} s with twice the step", file=sys.stderr)
        table.append(
            {
                "name": name,
                "optimum_s": round(fine, 6),
                "twice_the_step_s": round(coarse, 6),
                "nodes": nodes,
                "with_jerk_s": round(smooth[1], 4),
                "with_jerk_twice_the_step_s": round(smooth[0], 4),
            }
        )
    versions = {"casadi": casadi.__version__, "numpy": np.__version__, "python": sys.version.split()[0]}
    (HERE / "optima.json").write_text(
        json.dumps({"share": SHARE, "jerk_m_s3": JERK, "versions": versions, "optima": table}, indent=1) + "\n"
    )


if __name__ == "__main__":
    main()
