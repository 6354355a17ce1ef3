#!/usr/bin/env python3
"""Zero-order-hold tracking loop, computed independently with NumPy and SciPy.

What it computes
    For each case below: a planar vehicle follows a timed plan of lines, arcs,
    pivots and dwells. At tick k, at t_k = round(k*1e9/rate_hz) ns, a tracking
    law turns the true pose and the plan's reference at t_k into a wanted
    (v, omega); the machine's limits turn that into the command that is held
    until t_(k+1). The chassis motion under the held command is integrated
    numerically (scipy.integrate.solve_ivp, DOP853, rtol 1e-13, atol 1e-14),
    tick by tick; no closed-form arc is used for it. The whole loop is run a
    second time with the closed-form arc, and the two must agree.
    The reference poses are checked the same way: the plan's (v_d, omega_d) are
    integrated numerically over every segment and compared with its geometry.

Outputs, beside this file
    CASE.csv          every 25th tick (row k: state and reference at t_k, the
                      tracking error, the limited command of tick k); the table
                      holds ticks with t_k < the plan's duration
    CASE.site.toml    the vehicle, the law and the rate
    CASE.plan.json    the plan
    cases.json        name, law, gains, start (true pose at tick 0), rate_hz,
                      ticks (the number of ticks with t_k < duration)
    check_values.json single evaluations of the laws and one continuous closed
                      loop (both with mpmath, the loop also with DOP853)

Conventions
    Tracking error (reported): actual minus reference, in the reference frame;
    cross is positive to the left; headings wrapped to (-pi, pi].
    dt in the limits and in the integral of the off-axle law is 1/rate_hz; the
    motion between ticks lasts exactly t_(k+1) - t_k.
    Regimes: a law without feedback at rest leaves a reference that turns on the
    spot to v = k e_x, omega = omega_d - k (heading error), k = 2 1/s; a
    reference that rests is left alone, for the dead band here is a metre and a
    radian. The plan's time never slows and regimes change without blending.
    "Changed by the limits" means: the speed factor s < 1, or the step factor
    lambda < 1, or (car) the steering angle was clamped.

Versions used: Python 3.11.7, NumPy 2.4.6, SciPy 1.17.1, mpmath 1.4.1.

Literature
    Y. Kanayama, Y. Kimura, F. Miyazaki, T. Noguchi, "A stable tracking control
    method for an autonomous mobile robot", IEEE ICRA 1990.
    P. Morin, C. Samson, "Motion control of wheeled mobile robots", Springer
    Handbook of Robotics, chapter 34, 2008.
    A. De Luca, G. Oriolo, C. Samson, "Feedback control of a nonholonomic
    car-like robot", Springer LNCIS 229, 1998 (linear, nonlinear).
    Off-axle point: static feedback linearisation of the unicycle by the
    position of a point off the wheel axle (same chapter).

Usage: python zoh_loop.py   (rewrites the files beside it; about ten seconds)
"""

import json
import math
from pathlib import Path

import mpmath as mp
import numpy as np
import scipy
from scipy.integrate import solve_ivp

HERE = Path(__file__).resolve().parent
EVERY = 25
COLUMNS = (
    "t_s,x_m,y_m,heading_rad,ref_x_m,ref_y_m,ref_heading_rad,ref_speed_m_s,"
    "ref_turn_rate_rad_s,along_error_m,cross_error_m,heading_error_rad,"
    "speed_m_s,turn_rate_rad_s"
)


def wrap(a):
    """Wraps an angle to (-pi, pi]."""
    r = math.remainder(a, 2.0 * math.pi)
    return math.pi if r <= -math.pi else r


def sign(a):
    return (a > 0) - (a < 0)


# ---------------------------------------------------------------- motion


def move_numeric(pose, v, w, dt):
    def rhs(_t, s):
        return (v * math.cos(s[2]), v * math.sin(s[2]), w)

    r = solve_ivp(rhs, (0.0, dt), pose, method="DOP853", rtol=1e-13, atol=1e-14)
    assert r.success
    return tuple(float(c) for c in r.y[:, -1])


def move_arc(pose, v, w, dt):
    """Closed form; cross-check only."""
    x, y, h = pose
    half = 0.5 * w * dt
    chord = v * dt * float(np.sinc(half / math.pi))
    return (x + chord * math.cos(h + half), y + chord * math.sin(h + half), h + w * dt)


# ---------------------------------------------------------------- reference


class Plan:
    """The plan with its literal timing and the braking of its last segment."""

    def __init__(self, plan, vehicle):
        s0 = plan["start"]
        pose = (s0["x_m"], s0["y_m"], s0["heading_rad"])
        t = 0.0
        self.parts = []
        segs = plan["segments"]
        for i, g in enumerate(segs):
            p = {"t0": t, "pose": pose, "kind": g["kind"], "kappa": 0.0, "dir": 1.0}
            if g["kind"] in ("line", "arc"):
                p["dir"] = -1.0 if g.get("reverse", False) else 1.0
                if g["kind"] == "line":
                    length, p["turn_per_m"] = g["length_m"], 0.0
                else:
                    length = g["radius_m"] * abs(g["turn_rad"])
                    p["turn_per_m"] = sign(g["turn_rad"]) / g["radius_m"]
                p["kappa"] = p["dir"] * p["turn_per_m"]
                v0 = g["speed_m_s"]
                v1 = g.get("end_speed_m_s", v0)
                a = (v1 * v1 - v0 * v0) / (2.0 * length)
                p.update(v0=v0, a=a, length=length, brake=None)
                dur = 2.0 * length / (v0 + v1)
                if i == len(segs) - 1 and v1 > 0.0:
                    b = vehicle.braking(p["kappa"])
                    # literal v^2 = v0^2 + 2 a s meets 2 b (L - s)
                    sb = (2.0 * b * length - v0 * v0) / (2.0 * (a + b))
                    assert 0.0 < sb < length, "braking must fit in the last segment"
                    vb = math.sqrt(2.0 * b * (length - sb))
                    tb = 2.0 * sb / (v0 + vb)
                    dur = tb + vb / b
                    p["brake"] = (tb, b, dur)
            elif g["kind"] == "pivot":
                p["w"] = sign(g["turn_rad"]) * g["rate_rad_s"]
                dur = abs(g["turn_rad"]) / g["rate_rad_s"]
            else:
                dur = g["duration_s"]
            p["dur"] = dur
            self.parts.append(p)
            pose = self.at_part(p, dur)[0]
            t += dur
        self.duration = t
        self.joints = [p["t0"] for p in self.parts[1:]] + [t]

    @staticmethod
    def at_part(p, tau):
        x, y, h = p["pose"]
        if p["kind"] == "dwell":
            return (x, y, h), 0.0, 0.0, 0.0
        if p["kind"] == "pivot":
            return (x, y, h + p["w"] * tau), 0.0, p["w"], 0.0
        if p["brake"] is not None and tau >= p["brake"][0]:
            _, b, dur = p["brake"]
            left = dur - tau
            s, v = p["length"] - 0.5 * b * left * left, b * left
        else:
            s, v = p["v0"] * tau + 0.5 * p["a"] * tau * tau, p["v0"] + p["a"] * tau
        d, c = p["dir"], p["turn_per_m"]
        if c == 0.0:
            pose = (x + d * s * math.cos(h), y + d * s * math.sin(h), h)
        else:
            h1 = h + c * s
            pose = (
                x + d * (math.sin(h1) - math.sin(h)) / c,
                y - d * (math.cos(h1) - math.cos(h)) / c,
                h1,
            )
        return pose, d * v, c * v, p["kappa"]

    def at(self, t):
        """Reference pose, v_d, omega_d, curvature; the later segment at a joint."""
        for p in reversed(self.parts):
            if t >= p["t0"]:
                return self.at_part(p, t - p["t0"])
        raise ValueError(t)

    def geometry_check(self):
        """Largest gap between the geometry and the integral of (v_d, omega_d)."""
        gap = 0.0
        for p in self.parts:
            cuts = [0.0, p["dur"]]
            if p.get("brake"):
                cuts.insert(1, p["brake"][0])
            pose = p["pose"]
            for a, b in zip(cuts, cuts[1:]):

                def rhs(t, s, p=p, b=b):
                    # stay on this side of the brake point
                    _, v, w, _ = self.at_part(p, min(t, b))
                    return (v * math.cos(s[2]), v * math.sin(s[2]), w)

                r = solve_ivp(rhs, (a, b), pose, method="DOP853", rtol=1e-13,
                              atol=1e-14, max_step=0.1)
                pose = tuple(r.y[:, -1])
            want = self.at_part(p, p["dur"])[0]
            gap = max(gap, max(abs(i - j) for i, j in zip(pose, want)))
        return gap


# ---------------------------------------------------------------- limits


def ratio(limit, value):
    return math.inf if value == 0.0 else limit / abs(value)


class Unicycle:
    def __init__(self, p, rate):
        self.p, self.dt, self.last = p, 1.0 / rate, (0.0, 0.0)

    def braking(self, _kappa):
        return self.p["max_accel_m_s2"]

    def limit(self, v, w, _kappa, note):
        p = self.p
        s0 = min(ratio(p["max_speed_m_s"], v), ratio(p["max_turn_rate_rad_s"], w))
        s = min(1.0, s0)
        dv, dw = s * v - self.last[0], s * w - self.last[1]
        l0 = min(ratio(p["max_accel_m_s2"] * self.dt, dv),
                 ratio(p["max_turn_accel_rad_s2"] * self.dt, dw))
        lam = min(1.0, l0)
        self.last = (self.last[0] + lam * dv, self.last[1] + lam * dw)
        note(s0, l0)
        return self.last, s < 1.0 or lam < 1.0


class Differential:
    def __init__(self, p, rate):
        self.p, self.dt, self.last = p, 1.0 / rate, (0.0, 0.0)

    def braking(self, kappa):
        p = self.p
        return (p["wheel_radius_m"] * p["max_wheel_accel_rad_s2"]
                / (1.0 + abs(kappa) * p["track_width_m"] / 2.0))

    def limit(self, v, w, _kappa, note):
        p = self.p
        r, width = p["wheel_radius_m"], p["track_width_m"]
        left, right = (v - w * width / 2.0) / r, (v + w * width / 2.0) / r
        s0 = ratio(p["max_wheel_speed_rad_s"], max(abs(left), abs(right)))
        s = min(1.0, s0)
        dl, dr = s * left - self.last[0], s * right - self.last[1]
        l0 = ratio(p["max_wheel_accel_rad_s2"] * self.dt, max(abs(dl), abs(dr)))
        lam = min(1.0, l0)
        left, right = self.last[0] + lam * dl, self.last[1] + lam * dr
        self.last = (left, right)
        note(s0, l0)
        return (r * (right + left) / 2.0, r * (right - left) / width), s < 1.0 or lam < 1.0


class Car:
    def __init__(self, p, rate):
        self.p, self.dt, self.last = p, 1.0 / rate, (0.0, 0.0)

    def braking(self, _kappa):
        return self.p["max_accel_m_s2"]

    def limit(self, v, w, kappa, note):
        p = self.p
        base = p["wheelbase_m"]
        s0 = ratio(p["max_speed_m_s"], v)
        s = min(1.0, s0)
        v, w = s * v, s * w
        note.slow(abs(abs(v) - 0.01))
        free = math.atan(base * w / v) if abs(v) >= 0.01 else math.atan(base * kappa)
        steer = max(-p["max_steer_rad"], min(p["max_steer_rad"], free))
        dv, dd = v - self.last[0], steer - self.last[1]
        l0 = min(ratio(p["max_accel_m_s2"] * self.dt, dv),
                 ratio(p["max_steer_rate_rad_s"] * self.dt, dd))
        lam = min(1.0, l0)
        self.last = (self.last[0] + lam * dv, self.last[1] + lam * dd)
        note(s0, l0)
        cv, cd = self.last
        return (cv, cv * math.tan(cd) / base), s < 1.0 or lam < 1.0 or steer != free


VEHICLES = {"unicycle": Unicycle, "differential": Differential, "car": Car}


# ---------------------------------------------------------------- laws


def tracking_error(pose, ref):
    dx, dy, hd = pose[0] - ref[0], pose[1] - ref[1], ref[2]
    c, s = math.cos(hd), math.sin(hd)
    return c * dx + s * dy, -s * dx + c * dy, wrap(pose[2] - hd)


class Kanayama:
    def __init__(self, g, _dt):
        self.g = g

    def wanted(self, pose, ref, vd, wd):
        g = self.g
        c, s = math.cos(pose[2]), math.sin(pose[2])
        dx, dy = ref[0] - pose[0], ref[1] - pose[1]
        ex, ey, eh = c * dx + s * dy, -s * dx + c * dy, wrap(ref[2] - pose[2])
        return (vd * math.cos(eh) + g["k_x"] * ex,
                wd + vd * g["k_y"] * ey + abs(vd) * g["k_heading"] * math.sin(eh))

    def settle(self, changed):
        pass


class Samson:
    def __init__(self, g, _dt):
        self.g = g

    def wanted(self, pose, ref, vd, wd):
        g = self.g
        xe, ye, he = tracking_error(pose, ref)
        assert abs(he) < 1.4
        t, c = math.tan(he), math.cos(he)
        return ((vd - g["k_1"] * abs(vd) * (xe + ye * t)) / c,
                wd - (g["k_2"] * vd * ye + g["k_3"] * abs(vd) * t) * c * c)

    def settle(self, changed):
        pass


class OffAxle:
    def __init__(self, g, dt):
        self.g, self.dt = g, dt
        self.integral = np.zeros(2)
        self.error = np.zeros(2)

    def wanted(self, pose, ref, vd, wd):
        g = self.g
        arm = np.array([g["x_p_m"], g["y_p_m"]])

        def rot(h):
            return np.array([[math.cos(h), -math.sin(h)], [math.sin(h), math.cos(h)]])

        a_ref = rot(ref[2]) @ arm
        point = np.array(pose[:2]) + rot(pose[2]) @ arm
        target = np.array(ref[:2]) + a_ref
        rate = vd * np.array([math.cos(ref[2]), math.sin(ref[2])]) \
            + wd * np.array([-a_ref[1], a_ref[0]])
        self.error = target - point
        u = g["feed_forward"] * rate + g["k_p"] * self.error + g["k_i"] * self.integral
        ux, uy = rot(pose[2]).T @ u
        return float(ux + g["y_p_m"] / g["x_p_m"] * uy), float(uy / g["x_p_m"])

    def settle(self, changed):
        if not changed:
            self.integral = self.integral + self.error * self.dt


class Scheduled:
    """The linear design (De Luca, Oriolo, Samson) with an integral over the cross-track error, per metre travelled."""

    def __init__(self, g, dt):
        self.g, self.dt, self.integral, self.rate = g, dt, 0.0, 0.0

    def shape(self, _eh):
        return 1.0

    def wanted(self, pose, ref, vd, wd):
        g = self.g
        c, s = math.cos(pose[2]), math.sin(pose[2])
        dx, dy = ref[0] - pose[0], ref[1] - pose[1]
        ex, ey, eh = c * dx + s * dy, -s * dx + c * dy, wrap(ref[2] - pose[2])
        k = 2.0 * g["zeta"] * math.sqrt(wd * wd + g["b"] * vd * vd)
        self.rate = -tracking_error(pose, ref)[1] * abs(vd)
        return (vd * math.cos(eh) + k * ex,
                wd + g["b"] * vd * self.shape(eh) * ey + k * eh + g["k_i"] * vd * self.integral)

    def settle(self, changed):
        if not changed:
            self.integral += self.rate * self.dt


class Nonlinear(Scheduled):
    """The nonlinear design of the same."""

    def shape(self, eh):
        return 1.0 if eh == 0.0 else math.sin(eh) / eh


NODE = {"min_plan_rate": 1.0, "blend_s": 0.0, "settle_rate_1_s": 2.0,
        "settle_distance_m": 1.0, "settle_heading_rad": 1.0}


def in_regime(law, pose, ref, vd, wd):
    """The wanted (v, omega) of the feedback in force, and whether that is the law."""
    if abs(vd) >= 1e-3 or isinstance(law, OffAxle) or (abs(wd) >= 1e-3 and isinstance(law, Scheduled)):
        return law.wanted(pose, ref, vd, wd), True
    if abs(wd) < 1e-3:
        return (0.0, 0.0), False
    k = NODE["settle_rate_1_s"]
    c, s = math.cos(pose[2]), math.sin(pose[2])
    ex = c * (ref[0] - pose[0]) + s * (ref[1] - pose[1])
    return (k * ex, wd - k * tracking_error(pose, ref)[2]), False


LAWS = {"linear": Scheduled, "nonlinear": Nonlinear, "kanayama": Kanayama, "samson": Samson, "off-axle": OffAxle}


# ---------------------------------------------------------------- the loop


class Note:
    """Watches how close the run comes to any yes/no decision, and how often limits act."""

    def __init__(self):
        self.margin, self.slow_margin = math.inf, math.inf
        self.speed_limited = self.step_limited = self.ticks = 0

    def __call__(self, s0, l0):
        self.ticks += 1
        self.speed_limited += s0 < 1.0
        self.step_limited += l0 < 1.0
        # only a "changed" flag: matters where an integral is kept
        self.margin = min(self.margin, abs(s0 - 1.0), abs(l0 - 1.0))

    def slow(self, gap):
        self.slow_margin = min(self.slow_margin, gap)


def tick_ns(k, rate):
    return round(k * 1e9 / rate)


def run(case, move):
    rate = case["rate_hz"]
    vehicle = VEHICLES[case["vehicle"]["kind"]](case["vehicle"], rate)
    plan = Plan(case["plan"], vehicle)
    law = LAWS[case["law"]](case["gains"], 1.0 / rate)
    note = Note()
    st = case["start"]
    pose = (st["x_m"], st["y_m"], st["heading_rad"])
    trail = []
    k = 0
    while True:
        now = tick_ns(k, rate)
        t = now / 1e9
        assert min(abs(t - j) for j in plan.joints) > 1e-5, (case["name"], t, plan.joints)
        if t >= plan.duration:
            break
        ref, vd, wd, kappa = plan.at(t)
        err = tracking_error(pose, ref)
        assert abs(abs(err[2]) - math.pi) > 1e-3
        (v, w), by_law = in_regime(law, pose, ref, vd, wd)
        (cv, cw), changed = vehicle.limit(v, w, kappa, note)
        if by_law:
            law.settle(changed)
        trail.append((t, pose[0], pose[1], wrap(pose[2]), ref[0], ref[1], wrap(ref[2]),
                      vd, wd, *err, cv, cw))
        pose = move(pose, cv, cw, (tick_ns(k + 1, rate) - now) / 1e9)
        k += 1
    return trail, plan, note


# ---------------------------------------------------------------- cases


def line(length, speed, end=None, reverse=False):
    g = {"kind": "line", "length_m": length, "speed_m_s": speed}
    return extras(g, end, reverse)


def arc(radius, turn, speed, end=None, reverse=False):
    g = {"kind": "arc", "radius_m": radius, "turn_rad": turn, "speed_m_s": speed}
    return extras(g, end, reverse)


def extras(g, end, reverse):
    if end is not None:
        g["end_speed_m_s"] = end
    if reverse:
        g["reverse"] = True
    return g


def pivot(turn, rate):
    return {"kind": "pivot", "turn_rad": turn, "rate_rad_s": rate}


def dwell(duration):
    return {"kind": "dwell", "duration_s": duration}


def pose(x, y, h):
    return {"x_m": x, "y_m": y, "heading_rad": h}


UNICYCLE = {"kind": "unicycle", "max_speed_m_s": 1.0, "max_turn_rate_rad_s": 2.0,
            "max_accel_m_s2": 0.8, "max_turn_accel_rad_s2": 4.0}
DIFFERENTIAL = {"kind": "differential", "wheel_radius_m": 0.08, "track_width_m": 0.42,
                "max_wheel_speed_rad_s": 12.0, "max_wheel_accel_rad_s2": 15.0}
CAR = {"kind": "car", "wheelbase_m": 0.6, "max_speed_m_s": 1.5, "max_accel_m_s2": 1.0,
       "max_steer_rad": 0.6, "max_steer_rate_rad_s": 1.5}


def kanayama(kx, ky, kh):
    return {"k_x": kx, "k_y": ky, "k_heading": kh}


def samson(k1, k2, k3):
    return {"k_1": k1, "k_2": k2, "k_3": k3}


def off_axle(xp, yp, kp, ki, ff):
    return {"x_p_m": xp, "y_p_m": yp, "k_p": kp, "k_i": ki, "feed_forward": ff}


def scheduled(b, zeta, ki):
    return {"b": b, "zeta": zeta, "k_i": ki}


def case(name, law, gains, vehicle, rate, plan_start, start, segments):
    return {
        "name": name, "law": law, "gains": gains, "vehicle": vehicle, "rate_hz": rate,
        "start": start,
        "plan": {"format": "trackhold-plan/1", "id": name, "revision": 1, "open": False,
                 "start": plan_start, "segments": segments},
    }


CASES = [
    case("kanayama-unicycle", "kanayama", kanayama(2.0, 12.0, 6.0), UNICYCLE, 50.0,
         pose(1.0, -0.5, 0.4), pose(0.85, -0.27, 0.15),
         [line(2.013, 0.5), arc(1.1, 1.7, 0.45), line(1.507, 0.45, end=0.7),
          arc(1.3, -2.1, 0.5, end=0.3), arc(0.9, 0.8, 0.3, reverse=True),
          line(2.111, 0.35, end=0.6)]),
    case("kanayama-differential", "kanayama", kanayama(3.0, 20.0, 8.0), DIFFERENTIAL, 100.0,
         pose(0.0, 0.0, 0.0), pose(-0.6, 0.7, -0.9),
         [line(3.0071, 0.6), arc(0.8, -1.9, 0.5), line(1.0053, 0.5, end=0.1),
          dwell(0.7531), pivot(2.3, 0.6), line(1.2037, 0.4, reverse=True),
          arc(1.2, 2.4, 0.55)]),
    case("kanayama-car", "kanayama", kanayama(2.0, 6.0, 5.0), CAR, 50.0,
         pose(-2.0, 1.5, 2.8), pose(-2.1, 1.8, 2.6),
         [line(2.509, 0.7), arc(2.0, 1.4, 0.6), arc(1.6, -1.8, 0.6, end=0.4),
          line(1.313, 0.4, reverse=True), arc(2.2, -0.7, 0.4, reverse=True),
          line(1.007, 0.4, end=0.8), arc(1.8, 1.6, 0.7)]),
    case("samson-unicycle", "samson", samson(2.0, 5.0, 4.0), UNICYCLE, 30.0,
         pose(0.3, 0.2, -1.1), pose(0.55, 0.35, -0.8),
         [line(2.503, 0.6), arc(1.0, 2.2, 0.5), line(1.211, 0.4, reverse=True),
          arc(1.4, -1.1, 0.4, end=0.6, reverse=True), line(1.009, 0.4, end=0.7),
          arc(1.2, -1.5, 0.6), line(1.513, 0.6)]),
    case("samson-car", "samson", samson(1.5, 3.0, 3.0), CAR, 100.0,
         pose(5.0, -3.0, 1.9), pose(5.3, -3.1, 2.1),
         [line(3.0013, 0.8), arc(2.4, -1.5, 0.8), line(1.5071, 0.8, end=0.5),
          arc(1.9, 1.3, 0.5), line(1.2071, 0.4, reverse=True),
          arc(2.5, 0.6, 0.4, reverse=True), line(2.0073, 0.6, end=1.0),
          arc(2.1, -1.2, 0.9)]),
    case("off-axle-unicycle", "off-axle", off_axle(0.2, -0.06, 1.5, 0.0, 1.0), UNICYCLE, 50.0,
         pose(-1.0, 2.0, -2.9), pose(-1.2, 2.25, -2.6),
         [line(2.007, 0.5, end=0.3), dwell(1.2537), pivot(-1.2, 0.5), line(1.509, 0.5),
          arc(0.9, 2.6, 0.45), dwell(0.8511), pivot(0.9, 0.7), arc(1.5, -1.4, 0.5, end=0.7),
          line(1.613, 0.6)]),
    case("off-axle-differential", "off-axle", off_axle(0.15, 0.0, 1.2, 0.4, 0.9), DIFFERENTIAL,
         100.0, pose(0.5, 0.5, 0.7), pose(0.2, 0.75, 0.4),
         [line(2.0069, 0.5), arc(1.0, -1.8, 0.5), line(1.5031, 0.5, end=0.7),
          pivot(1.1, 0.8), arc(1.3, 2.2, 0.55), line(2.0043, 0.55)]),
    case("linear-differential", "linear", scheduled(6.0, 0.8, 1.5), DIFFERENTIAL, 100.0,
         pose(-0.4, 0.9, -0.6), pose(-0.6, 1.1, -0.9),
         [line(2.5037, 0.5), arc(1.1, 1.6, 0.45), line(1.2051, 0.45, end=0.1), dwell(0.6533),
          pivot(-1.4, 0.6), line(1.3027, 0.4, reverse=True), arc(1.2, -1.9, 0.5)]),
    case("nonlinear-unicycle", "nonlinear", scheduled(9.0, 0.7, 0.0), UNICYCLE, 50.0,
         pose(2.0, -1.0, 2.2), pose(2.2, -0.7, 1.2),
         [line(2.207, 0.5), arc(0.9, -1.8, 0.45), line(1.403, 0.45, end=0.2), pivot(1.1, 0.7),
          arc(1.2, 1.3, 0.4, reverse=True), line(1.809, 0.45, end=0.6)]),
]


def site_toml(c):
    rows = ["[vehicle]"]
    for k, v in c["vehicle"].items():
        rows.append(f'{k} = "{v}"' if isinstance(v, str) else f"{k} = {float(v)!r}")
    rows += ["", "[law]", f'name = "{c["law"]}"', "", "[law.gains]"]
    rows += [f"{k} = {float(v)!r}" for k, v in c["gains"].items()]
    rows += ["", "[node]", f"rate_hz = {c['rate_hz']!r}"]
    rows += [f"{k} = {v!r}" for k, v in NODE.items()] + [""]
    if c["vehicle"]["kind"] == "car":
        # The arcs of these plans join without clothoids; the tables say what a law makes of that.
        rows += ["[check]", "curvature_step_1_m = 2.0", ""]
    return "\n".join(rows)


def dump(path, value):
    path.write_text(json.dumps(value, indent=2) + "\n")


def check_values():
    """Law values and one continuous closed loop, computed afresh with 30 digits."""
    mp.mp.dps = 30
    f = mp.mpf
    ex, ey, eh, vd, wd = f("0.10"), f("-0.05"), f("0.20"), f("0.5"), f("0.2")
    kan = (vd * mp.cos(eh) + 10 * ex, wd + vd * 64 * ey + abs(vd) * 16 * mp.sin(eh))
    # e is reference minus actual in the robot frame; the reference frame is turned by
    # phi_d - phi = eh from it, so actual minus reference there is -R(-eh) e
    xe = -(mp.cos(eh) * ex + mp.sin(eh) * ey)
    ye = -(-mp.sin(eh) * ex + mp.cos(eh) * ey)
    he = -eh
    sam = ((vd - abs(vd) * (xe + ye * mp.tan(he))) / mp.cos(he),
           wd - (vd * ye + abs(vd) * mp.tan(he)) * mp.cos(he) ** 2)
    phi, ux, uy, b = f("0.3"), f("0.4"), f("0.1"), f("0.1")
    off = (mp.cos(phi) * ux + mp.sin(phi) * uy, (-mp.sin(phi) * ux + mp.cos(phi) * uy) / b)

    def loop(t, s, cos, sin, v):
        x, y, h = s
        dx, dy = v * t - x, -y
        e1, e2, e3 = cos(h) * dx + sin(h) * dy, -sin(h) * dx + cos(h) * dy, -h
        lin, turn = v * cos(e3) + 10 * e1, v * 64 * e2 + abs(v) * 16 * sin(e3)
        return [lin * cos(h), lin * sin(h), turn]

    exact = mp.odefun(lambda t, s: loop(t, s, mp.cos, mp.sin, f("0.3")), 0,
                      [f(0), f("-0.05"), f(0)])
    states = {}
    gap = 0.0
    for t in ("0.5", "2"):
        want = [float(c) for c in exact(f(t))]
        r = solve_ivp(lambda t, s: loop(t, s, math.cos, math.sin, 0.3), (0.0, float(t)),
                      (0.0, -0.05, 0.0), method="DOP853", rtol=1e-13, atol=1e-14)
        gap = max(gap, max(abs(a - b) for a, b in zip(want, r.y[:, -1])))
        states[t] = want
    assert gap < 1e-11, gap

    def out(p):
        return {"speed_m_s": float(p[0]), "turn_rate_rad_s": float(p[1])}

    return {
        "law_values": {
            "robot_frame_error": {"e_x_m": 0.10, "e_y_m": -0.05, "e_heading_rad": 0.20},
            "ref_speed_m_s": 0.5, "ref_turn_rate_rad_s": 0.2,
            "kanayama": {"gains": kanayama(10.0, 64.0, 16.0), **out(kan)},
            "samson": {"gains": samson(1.0, 1.0, 1.0),
                       "along_error_m": float(xe), "cross_error_m": float(ye),
                       "heading_error_rad": float(he), **out(sam)},
        },
        "off_axle_value": {"x_p_m": 0.1, "y_p_m": 0.0, "heading_rad": 0.3,
                           "u_x_m_s": 0.4, "u_y_m_s": 0.1, **out(off)},
        "kanayama_continuous": {
            "gains": kanayama(10.0, 64.0, 16.0), "ref_speed_m_s": 0.3,
            "start": pose(0.0, -0.05, 0.0),
            "states": [{"t_s": float(t), **pose(*s)} for t, s in states.items()],
        },
    }


def main():
    print("numpy", np.__version__, "scipy", scipy.__version__, "mpmath", mp.__version__)
    listing = []
    for c in CASES:
        trail, plan, note = run(c, move_numeric)
        again, _, _ = run(c, move_arc)
        assert len(trail) == len(again)
        arc_gap = max(max(abs(a - b) for a, b in zip(p[1:3] + p[9:], q[1:3] + q[9:]))
                      for p, q in zip(trail, again))
        geo_gap = plan.geometry_check()
        assert arc_gap < 5e-11 and geo_gap < 1e-11, (arc_gap, geo_gap)
        if c["gains"].get("k_i", 0.0) > 0.0:
            assert note.margin > 1e-7, note.margin
        assert note.slow_margin > 1e-6, note.slow_margin
        rows = trail[::EVERY]
        assert min(min(abs(abs(r[3]) - math.pi), abs(abs(r[6]) - math.pi)) for r in rows) > 1e-6
        name = c["name"]
        (HERE / f"{name}.csv").write_text(
            COLUMNS + "\n" + "".join(",".join(repr(float(x)) for x in r) + "\n" for r in rows))
        (HERE / f"{name}.site.toml").write_text(site_toml(c))
        dump(HERE / f"{name}.plan.json", c["plan"])
        listing.append({"name": name, "law": c["law"], "gains": c["gains"], "start": c["start"],
                        "rate_hz": c["rate_hz"], "ticks": len(trail)})
        joint = min(min(abs(r[0] - j) for r in trail) for j in plan.joints)
        print(f"{name}: T={plan.duration:.4f} s ticks={len(trail)} rows={len(rows)} "
              f"arc_gap={arc_gap:.1e} geo_gap={geo_gap:.1e} joint>={joint:.1e} s "
              f"speed-limited={note.speed_limited} step-limited={note.step_limited} "
              f"decision margin={note.margin:.1e} slow margin={note.slow_margin:.1e}")
        print("   |e| at last row: along %.3e cross %.3e heading %.3e; largest heading error %.3f"
              % (*trail[-1][9:12], max(abs(r[11]) for r in trail)),
              "max cross %.3f max along %.3f" % (max(abs(r[10]) for r in trail),
                                                 max(abs(r[9]) for r in trail)))
    dump(HERE / "cases.json", listing)
    dump(HERE / "check_values.json", check_values())


if __name__ == "__main__":
    main()
