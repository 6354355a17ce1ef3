#!/usr/bin/env python3
"""How closely a differential drive can follow twelve plans at all: optima by CasADi and IPOPT, to rate the laws against.

    python3 -m venv V && V/bin/pip install casadi numpy
    V/bin/python tests/reference/optimum/optimum.py              # writes the files below; half a minute
    V/bin/python tests/reference/optimum/optimum.py eight stop   # these alone; the others keep their values

What it computes
    The machine rests at a start pose beside the plan's; the plan's clock starts at once. Found are the wheel speeds
    w_k (left, right), each held from t_k = k dt to t_(k+1), that make
        J = dt sum over k = 1..N of (x_e^2 + y_e^2 + 0.1 phi_e^2)     [m^2 s, with 0.1 m^2/rad^2]
    least, under the very limits of the tick loop: |w_k| <= 12 rad/s and |w_k - w_(k-1)| <= 15 rad/s^2 dt for each wheel
    by itself, w_(-1) = 0. Between ticks the chassis point moves on the exact arc. The error is pose minus reference at
    t_k, its heading wrapped to (-pi, pi]. Nothing else is weighed: no regularisation, no end cost. The runs are so long
    that the error has died out at their end (`end_error_m`, `end_error_rad` in optima.json tell), so that a longer one
    would cost the same. (In "stop" a millimetre is left: shifting sideways at rest would cost more than it saves.)

    The problem is not convex. It is solved from twenty guesses and more (a feedback law simulated with five gain sets, the
    reference's own wheel speeds, smooth random wheel speeds; and from the best of these, disturbed), and the best result is
    kept: a local optimum, and no better one was found. `guesses` in optima.json tells for each how often and how
    closely the same value was reached. The wrap is treated exactly: each tick's error is taken on the branch on which its
    guess lies, and the problem is solved again until the solution lies on the branches it was solved for.

    IPOPT's answer is then rounded to 1e-9 rad/s, brought inside the limits in whole units of that, and driven once more
    in exact arcs: what is written is a motion that the machine can do, and J is that motion's cost.

The references are computed here from the plans' segments, without anything of the project: lines and arcs in closed
form, clothoids by Gauss-Legendre quadrature; constant acceleration and trapezoids in time. A test holds the project's
own plan against these poses.

Outputs, beside this file
    NAME.plan.json    the plan
    NAME.csv          row k = 1..N: t_k, the wheel speeds held from t_(k-1) to t_k, pose and reference at t_k
    optima.json       per scenario: start pose, N, J, final pose, and how it was found

Versions used: Python 3.11.7, CasADi 3.8.2 with IPOPT 3.14.19 (MUMPS 5.8.2), NumPy 2.4.6.
"""

import json
import math
import re
import sys
import time
from pathlib import Path

import casadi as ca
import numpy as np

HERE = Path(__file__).resolve().parent
RADIUS_M, TRACK_M = 0.1, 0.5
TOP_RAD_S, ACCEL_RAD_S2 = 12.0, 15.0
DT = 0.02
HEADING_WEIGHT = 0.1
UNIT = 1e-9  # wheel speeds are written in whole units of this
# A vector of wheel speeds (left, right) to (speed, turn rate).
TO_BODY = np.array([[RADIUS_M / 2, RADIUS_M / 2], [-RADIUS_M / TRACK_M, RADIUS_M / TRACK_M]])
TO_WHEELS = np.linalg.inv(TO_BODY)


# ---------------------------------------------------------------- scenarios


def line(length, speed, end=None, **more):
    timing = {"speed_m_s": speed} | ({} if end is None else {"end_speed_m_s": end})
    return {"kind": "line", "length_m": length} | timing | more


def arc(radius, turn, speed, **more):
    return {"kind": "arc", "radius_m": radius, "turn_rad": turn, "speed_m_s": speed} | more


def clothoid(begin, end, length, speed):
    return {"kind": "clothoid", "curvature_start_1_m": begin, "curvature_end_1_m": end, "length_m": length,
            "speed_m_s": speed}


def dwell(seconds):
    return {"kind": "dwell", "duration_s": seconds}


def swing(curvature, ramp, turn, speed):
    """A bend of `turn` rad in all, with clothoids in and out: the curvature is continuous."""
    sign = math.copysign(1.0, turn)
    rest = abs(turn) - curvature * ramp
    return [clothoid(0.0, sign * curvature, ramp, speed), arc(1.0 / curvature, sign * rest, speed),
            clothoid(sign * curvature, 0.0, ramp, speed)]


TRAPEZOID = {"profile": "trapezoid", "speed_m_s": 0.5, "accel_m_s2": 0.5}
BACK = {"reverse": True}

# name: plan's start, the start's offset in the reference's frame (along, cross, heading), seconds, segments. Where a plan
# is closed and ends at speed, it brakes later than the run lasts.
SCENARIOS = {
    "line-aside": ((0.0, 0.0, 0.0), (0.0, 0.6, 0.0), 6.0, [line(5.0, 0.5)]),
    "line-askew": ((1.0, -2.0, 0.7), (0.0, 0.3, 0.9), 6.0, [line(5.0, 0.5)]),
    "line-behind": ((0.0, 0.0, -2.0), (-0.5, 0.0, 0.0), 6.0, [line(5.0, 0.5)]),
    "bend": ((-1.0, 2.0, 0.4), (-0.1, 0.3, -0.4), 6.0, [arc(2.0, 2.4, 0.6)]),
    "tight-bend": ((0.0, 0.0, 1.2), (0.0, -0.25, 0.5), 6.0, [arc(0.6, -6.0, 0.5)]),
    "eight": ((0.0, 0.0, 0.0), (0.0, 0.3, 0.3), 17.0,
              [line(0.4, 0.8), *swing(1.0, 0.6, 1.5 * math.pi, 0.8), line(2.0, 0.8),
               *swing(1.0, 0.6, -1.5 * math.pi, 0.8), line(2.0, 0.8)]),
    "reverse-line": ((0.5, 0.0, 2.6), (0.0, 0.4, -0.5), 6.0, [line(5.0, 0.5, **BACK)]),
    "reverse-bend": ((0.0, 0.5, -0.6), (0.1, 0.2, 0.3), 7.0, [arc(1.5, -2.6, 0.4, **BACK)]),
    "pivot": ((0.0, 0.0, 0.3), (0.0, 0.1, -0.2), 10.0,
              [line(1.0, 0.5) | TRAPEZOID, dwell(0.4),
               {"kind": "pivot", "turn_rad": math.pi / 2, "profile": "trapezoid", "rate_rad_s": 1.0,
                "accel_rad_s2": 2.0},
               dwell(0.4), line(1.5, 0.5) | TRAPEZOID]),
    "stop": ((0.0, 0.0, -0.9), (0.0, 0.3, 0.0), 7.0, [line(1.0, 0.5), line(0.5, 0.5, 0.0)]),
    "turned-round": ((0.0, 0.0, 1.0), (0.0, 0.2, 2.8), 8.0, [line(6.0, 0.5)]),
    # From 0.5 m/s to 1 m/s, where the outer wheel has 4 % of its speed left.
    "s-bend": ((0.0, 0.0, 0.0), (0.0, 0.4, -0.3), 8.0,
               [line(1.5, 0.5, 1.0), *swing(0.6, 0.8, 1.2, 1.0), *swing(0.6, 0.8, -1.2, 1.0), line(1.5, 1.0, 0.5),
                line(2.0, 0.5)]),
}


def plan_file(name, start, segments):
    return {"format": "trackhold-plan/1", "id": name, "revision": 1,
            "start": dict(zip(("x_m", "y_m", "heading_rad"), start)), "segments": segments}


# ---------------------------------------------------------------- reference


def timing(segment):
    """Phases (seconds, rate, acceleration) of a segment, and its extent (m, or rad on a pivot)."""
    kind = segment["kind"]
    if kind == "dwell":
        return [(segment["duration_s"], 0.0, 0.0)], 0.0
    extent = (abs(segment["turn_rad"]) * segment.get("radius_m", 1.0) if kind in ("arc", "pivot")
              else segment["length_m"])
    top = segment.get("speed_m_s", segment.get("rate_rad_s"))
    if segment.get("profile") == "trapezoid":
        accel = segment.get("accel_m_s2", segment.get("accel_rad_s2"))
        ramp = top / accel
        assert top * ramp < extent, "no triangles here"
        return [(ramp, 0.0, accel), (extent / top - ramp, top, 0.0), (ramp, top, -accel)], extent
    end = segment.get("end_speed_m_s", top)
    return [(2.0 * extent / (top + end), top, (end * end - top * top) / (2.0 * extent))], extent


def progress(phases, t):
    """Way from the segment's beginning and its rate, `t` s after it."""
    way = 0.0
    for seconds, rate, accel in phases:
        t_in = min(t, seconds)
        if t <= seconds:
            return way + t_in * (rate + 0.5 * accel * t_in), rate + accel * t_in
        way += seconds * (rate + 0.5 * accel * seconds)
        t -= seconds
    return way, rate + accel * seconds


def place(pose, segment, way):
    """Pose and change of heading per metre (per radian on a pivot) after `way` on a segment that begins at `pose`."""
    x, y, h = pose
    kind = segment["kind"]
    if kind == "dwell":
        return pose, 0.0
    if kind == "pivot":
        sign = math.copysign(1.0, segment["turn_rad"])
        return (x, y, h + sign * way), sign
    sign = -1.0 if segment.get("reverse") else 1.0
    if kind == "line":
        return (x + sign * way * math.cos(h), y + sign * way * math.sin(h), h), 0.0
    if kind == "arc":
        bend = math.copysign(1.0 / segment["radius_m"], segment["turn_rad"])
        h1 = h + bend * way
        return (x + sign * (math.sin(h1) - math.sin(h)) / bend, y - sign * (math.cos(h1) - math.cos(h)) / bend, h1), bend
    assert kind == "clothoid" and sign > 0
    begin = segment["curvature_start_1_m"]
    rate = (segment["curvature_end_1_m"] - begin) / segment["length_m"]
    nodes, weights = np.polynomial.legendre.leggauss(30)
    s = 0.5 * way * (nodes + 1.0)
    angle = h + begin * s + 0.5 * rate * s * s
    x1, y1 = x + 0.5 * way * weights @ np.cos(angle), y + 0.5 * way * weights @ np.sin(angle)
    return (float(x1), float(y1), h + begin * way + 0.5 * rate * way * way), begin + rate * way


def reference(start, segments, count):
    """Poses (heading not wrapped) and body velocities at ticks 0..count; after the end it rests."""
    poses, velocities = np.zeros((count + 1, 3)), np.zeros((count + 1, 2))
    begin, pose, index = 0.0, start, 0
    phases, extent = timing(segments[0])
    for k in range(count + 1):
        t = k * DT
        while index < len(segments) and t >= begin + sum(p[0] for p in phases):
            begin += sum(p[0] for p in phases)
            pose, _ = place(pose, segments[index], extent)
            index += 1
            if index < len(segments):
                phases, extent = timing(segments[index])
        if index == len(segments):
            poses[k] = pose
            continue
        segment = segments[index]
        way, rate = progress(phases, t - begin)
        poses[k], bend = place(pose, segment, way)
        sign = {"pivot": 0.0, "dwell": 0.0}.get(segment["kind"], -1.0 if segment.get("reverse") else 1.0)
        velocities[k] = sign * rate, bend * rate
    return poses, velocities


# ---------------------------------------------------------------- machine


def moved(pose, wheels):
    """The pose one tick later, on the exact arc."""
    v, w = TO_BODY @ wheels
    half = 0.5 * w * DT
    chord = v * DT * np.sinc(half / math.pi)
    return np.array([pose[0] + chord * math.cos(pose[2] + half), pose[1] + chord * math.sin(pose[2] + half),
                     pose[2] + 2.0 * half])


def limited(wheels, last):
    """The nearest wheel speeds within the limits."""
    step = ACCEL_RAD_S2 * DT
    return np.clip(np.clip(wheels, last - step, last + step), -TOP_RAD_S, TOP_RAD_S)


def drive(start, wanted):
    """Wheel speeds and poses when the speeds `wanted(k, pose)` go through the limits, for k = 0..count - 1."""
    count = wanted.count
    poses, wheels, last = np.zeros((count + 1, 3)), np.zeros((count, 2)), np.zeros(2)
    poses[0] = start
    for k in range(count):
        last = wheels[k] = limited(wanted(k, poses[k]), last)
        poses[k + 1] = moved(poses[k], last)
    return poses, wheels


class Table:
    """Wheel speeds from a table."""

    def __init__(self, wheels):
        self.wheels, self.count = wheels, len(wheels)

    def __call__(self, k, _pose):
        return self.wheels[k]


class Feedback:
    """Steers towards the reference by a plain feedback in the robot's frame: only to begin the search near a drive that
    gets there. `turns` adds whole turns to the heading that it aims at."""

    def __init__(self, poses, velocities, gains, turns=0.0):
        self.poses, self.velocities, self.gains, self.count = poses, velocities, gains, len(poses) - 1
        self.turns = 2.0 * math.pi * turns

    def __call__(self, k, pose):
        k_x, k_y, k_heading = self.gains
        dx, dy = self.poses[k, :2] - pose[:2]
        c, s = math.cos(pose[2]), math.sin(pose[2])
        e_x, e_y, e_h = c * dx + s * dy, c * dy - s * dx, self.poses[k, 2] + self.turns - pose[2]
        v, w = self.velocities[k]
        return TO_WHEELS @ [v * math.cos(e_h) + k_x * e_x, w + k_y * v * e_y + k_heading * math.sin(e_h / 2.0) * 2.0]


def errors(poses, against):
    """Squared distance and wrapped heading error at ticks 1..N."""
    d = poses[1:] - against[1:]
    return d[:, 0] ** 2 + d[:, 1] ** 2, np.remainder(d[:, 2] + math.pi, 2.0 * math.pi) - math.pi


def cost(poses, against):
    square, heading = errors(poses, against)
    return DT * float(np.sum(square + HEADING_WEIGHT * heading**2))


# ---------------------------------------------------------------- optimum


class Problem:
    """The optimisation for one number of ticks; start and reference are parameters."""

    def __init__(self, count):
        self.count = count
        z, w = ca.SX.sym("z", 3, count), ca.SX.sym("w", 2, count)
        start, aim = ca.SX.sym("start", 3), ca.SX.sym("aim", 3, count)
        before, last = ca.horzcat(start, z[:, :-1]), ca.horzcat(ca.SX.zeros(2, 1), w[:, :-1])
        body = ca.mtimes(ca.DM(TO_BODY), w)
        half = 0.5 * DT * body[1, :]
        # At most 0.048 rad: the next term of the series is below the last bit.
        sinc = 1.0 - half**2 / 6.0 + half**4 / 120.0 - half**6 / 5040.0
        chord, mean = DT * body[0, :] * sinc, before[2, :] + half
        after = ca.vertcat(before[0, :] + chord * ca.cos(mean), before[1, :] + chord * ca.sin(mean),
                           before[2, :] + 2.0 * half)
        d = z - aim
        total = ca.sum2(d[0, :] ** 2 + d[1, :] ** 2 + HEADING_WEIGHT * d[2, :] ** 2)
        nlp = {"x": ca.vertcat(ca.vec(z), ca.vec(w)), "p": ca.vertcat(start, ca.vec(aim)), "f": total,
               "g": ca.vertcat(ca.vec(after - z), ca.vec(w - last))}
        options = {"print_time": False, "ipopt": {
            "print_level": 0, "sb": "yes", "tol": 1e-9, "constr_viol_tol": 1e-10, "max_iter": 1500,
            "bound_relax_factor": 0.0, "mu_strategy": "adaptive"}}
        self.solver = ca.nlpsol("optimum", "ipopt", nlp, options)
        free, step = np.full(3 * count, np.inf), np.full(2 * count, ACCEL_RAD_S2 * DT)
        top, zero = np.full(2 * count, TOP_RAD_S), np.zeros(3 * count)
        self.bounds = {"lbx": np.concatenate([-free, -top]), "ubx": np.concatenate([free, top]),
                       "lbg": np.concatenate([zero, -step]), "ubg": np.concatenate([zero, step])}

    def solve_on(self, start, aim, poses, wheels):
        """From a guess, with the errors against `aim` as they are."""
        r = self.solver(x0=np.concatenate([poses[1:].ravel(), wheels.ravel()]),
                        p=np.concatenate([start, aim[1:].ravel()]), **self.bounds)
        x, stats = np.array(r["x"]).ravel(), self.solver.stats()
        poses = np.vstack([start, x[: 3 * self.count].reshape(-1, 3)])
        return poses, x[3 * self.count:].reshape(-1, 2), stats

    def solve(self, start, against, guess):
        """From a guess, on the branches of the heading error on which it ends up. None if IPOPT does not succeed."""
        poses, wheels = guess
        iterations = 0
        for _ in range(12):
            turns = np.round((poses[:, 2] - against[:, 2]) / (2.0 * math.pi))
            aim = against + np.outer(2.0 * math.pi * turns, [0.0, 0.0, 1.0])
            poses, wheels, stats = self.solve_on(start, aim, poses, wheels)
            iterations += stats["iter_count"]
            if not stats["success"]:
                return None
            if np.array_equal(turns, np.round((poses[:, 2] - against[:, 2]) / (2.0 * math.pi))):
                return poses, wheels, iterations
        return None


def guesses(start, poses, velocities, rng):
    """Named drives to begin from."""
    count = len(poses) - 1
    for gains in [(2.0, 8.0, 4.0), (1.0, 3.0, 2.0), (4.0, 30.0, 10.0), (0.3, 1.0, 1.0), (2.0, 0.0, 6.0)]:
        for turns in (-1.0, 0.0, 1.0) if abs(start[2] - poses[0, 2]) > 1.5 else (0.0,):
            yield "feedback", drive(start, Feedback(poses, velocities, gains, turns))
    own = velocities[:-1] @ TO_WHEELS.T
    yield "reference", drive(start, Table(own))
    for size in (1.0, 2.0, 3.0, 3.0, 3.0, 5.0, 5.0, 5.0):
        yield "random", drive(start, Table(own + smooth(rng, count, size)))


def smooth(rng, count, size):
    """Smooth random wheel speeds of about `size` rad/s that die away over the run."""
    t = np.arange(count) * DT
    waves = [np.outer(np.sin(2.0 * math.pi * f * t + rng.uniform(0.0, 6.28)), rng.normal(0.0, size, 2))
             for f in (0.15, 0.3, 0.6, 1.2)]
    return sum(waves) * np.exp(-t / (0.3 * count * DT))[:, None]


def in_whole_units(wheels):
    """Rounded to the unit and brought inside the limits, in integers."""
    unit = round(1.0 / UNIT)
    top, step = round(TOP_RAD_S * unit), round(ACCEL_RAD_S2 * DT * unit)
    rounded, last = np.zeros_like(wheels), np.zeros(2, dtype=np.int64)
    for k, pair in enumerate(np.round(wheels * unit).astype(np.int64)):
        last = np.clip(np.clip(pair, last - step, last + step), -top, top)
        rounded[k] = last / unit
    return rounded


def optimum(problem, start, poses, velocities, seed):
    """The best motion over all guesses: wheel speeds, and how each guess fared."""
    rng, tried, best = np.random.default_rng(seed), [], None

    def attempt(label, guess):
        nonlocal best
        solved = problem.solve(start, poses, guess)
        value = None if solved is None else cost(solved[0], poses)
        tried.append((label, value))
        if solved is not None and (best is None or value < best[0]):
            best = (value, solved)

    for label, guess in guesses(start, poses, velocities, rng):
        attempt(label, guess)
    for size in (0.5, 0.5, 1.5, 1.5, 3.0, 3.0):
        wheels = best[1][1] + smooth(rng, problem.count, size)
        attempt("disturbed", drive(start, Table(wheels)))
    return best[1], tried


# ---------------------------------------------------------------- files


def solve_scenario(name, start, offset, seconds, segments, problems):
    count = round(seconds / DT)
    poses, velocities = reference(start, segments, count)
    c, s = math.cos(start[2]), math.sin(start[2])
    begin = np.array([start[0] + c * offset[0] - s * offset[1], start[1] + s * offset[0] + c * offset[1],
                      start[2] + offset[2]])
    if count not in problems:
        problems[count] = Problem(count)
    problem = problems[count]
    (z, w, iterations), tried = optimum(problem, begin, poses, velocities, seed=len(name))
    violation = float(np.max(np.abs(np.array([moved(p, u) for p, u in zip(z, w)]) - z[1:])))
    wheels = in_whole_units(w)
    driven, _ = drive(begin, Table(wheels))
    value = cost(driven, poses)
    square, heading = errors(driven, poses)
    reached = sorted(v for _, v in tried if v is not None)
    entry = {
        "name": name, "plan": f"{name}.plan.json", "table": f"{name}.csv",
        "start": dict(zip(("x_m", "y_m", "heading_rad"), [*begin[:2].tolist(), math.remainder(begin[2], 2 * math.pi)])),
        "ticks": count, "cost_m2_s": value,
        "end": dict(zip(("x_m", "y_m", "heading_rad"), [*driven[-1, :2].tolist(),
                                                        math.remainder(driven[-1, 2], 2 * math.pi)])),
        "end_error_m": math.sqrt(square[-1]), "end_error_rad": float(heading[-1]),
        "ipopt_cost_m2_s": cost(z, poses), "ipopt_violation_m": violation, "ipopt_iterations": iterations,
        "guesses": {"tried": len(tried), "solved": len(reached),
                    "within_1e-6_of_the_best": sum(v <= reached[0] * (1.0 + 1e-6) for v in reached),
                    "worst_over_best": reached[-1] / reached[0]},
    }
    write_table(HERE / f"{name}.csv", wheels, driven, poses)
    (HERE / f"{name}.plan.json").write_text(json.dumps(plan_file(name, start, segments), indent=2) + "\n")
    return entry


def short(value):
    """To nine decimals, without idle zeros."""
    text = f"{value:.9f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def write_table(path, wheels, driven, poses):
    rows = ["t_s,left_rad_s,right_rad_s,x_m,y_m,heading_rad,ref_x_m,ref_y_m,ref_heading_rad"]
    for k, pair in enumerate(wheels, start=1):
        pose = [*driven[k, :2], math.remainder(driven[k, 2], 2 * math.pi)]
        ref = [*poses[k, :2], math.remainder(poses[k, 2], 2 * math.pi)]
        rows.append(",".join(short(v) for v in [k * DT, *pair, *pose, *ref]))
    path.write_text("\n".join(rows) + "\n")


def main(names):
    listing = HERE / "optima.json"
    old = {e["name"]: e for e in json.loads(listing.read_text())["scenarios"]} if listing.exists() else {}
    problems, entries = {}, []
    for name, scenario in SCENARIOS.items():
        if names and name not in names:
            if name in old:
                entries.append(old[name])
            continue
        begun = time.monotonic()
        entry = solve_scenario(name, *scenario, problems)
        entries.append(entry)
        print(name, {k: v for k, v in entry.items() if k not in ("name", "plan", "table", "start", "end")},
              f"{time.monotonic() - begun:.0f} s", flush=True)
    config = (Path(ca.__file__).parent / "include/coin-or/IpoptConfig.h").read_text()
    ipopt = re.search(r'define IPOPT_VERSION "(.*)"', config).group(1)
    head = {"casadi": ca.__version__, "ipopt": ipopt, "numpy": np.__version__,
            "period_s": DT, "heading_weight_m2_rad2": HEADING_WEIGHT}
    listing.write_text(json.dumps(head | {"scenarios": entries}, indent=2) + "\n")


if __name__ == "__main__":
    main(sys.argv[1:])
