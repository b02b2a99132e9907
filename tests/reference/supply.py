"""Steady states of rectifier supplies by SciPy's stiff integrators: the independent reference of the solver.

The full circuit equations are integrated mode by mode (which of the two conducting paths carry current), each mode a
smooth ODE, with the changes of mode found as events; the periodic state is found by Newton's method with finite
differences. It shares no method with the solver it judges: that one steps implicitly with fixed steps, finds no events
and carries tangents along.
"""

import numpy as np
from scipy.integrate import simpson, solve_ivp
from scipy.optimize import brentq

RTOL = 1e-9
SAMPLES = 401  # in each stretch between two events
OFF, P, N, BOTH = "off", "p", "n", "both"


class Supply:
    """One case as `cases.py` writes it."""

    def __init__(self, case, rtol=RTOL):
        self.case, self.rtol = case, rtol
        self.wiring = case["wiring"]
        self.omega = 2 * np.pi * case["hz"]
        self.period = 1 / case["hz"]
        norm = np.sqrt(2 / (1 + sum(a * a for _, a in case["harmonics"])))
        self.amplitude = norm * case["secondary_v"] * case["mains_v"] / 230.0
        self.rs, self.leak = case["source_ohm"], case["leakage_h"]
        self.m = 2 if self.wiring == "bridge" else 1
        self.sections = case["filter"]
        self.n = len(self.sections)
        self.choke_input = "choke_h" in self.sections[0]
        self.series_r = [s.get("series_ohm", s.get("choke_ohm", 0.0)) for s in self.sections]
        self.line_r = 0.0
        self.knee = self.drop_r = self.drop_root = 0.0
        dropper = case["dropper"]
        if dropper:
            kind = dropper["kind"]
            if kind == "line-resistor":
                self.line_r = dropper["ohm"]
                self.series_r[1] += self.line_r
            elif kind == "return-resistor":
                self.drop_r = dropper["ohm"]
            elif kind == "return-zener":
                self.knee, self.drop_r = dropper["zener_v"], dropper["zener_ohm"]
            else:
                self.knee = dropper["zener_v"] + dropper["threshold_v"]
                self.drop_root = dropper["k_a_per_v2"] ** -0.5
        # States: a capacitor voltage a section, then a current a choke, then the winding's, then a doubler's pair.
        names = [("c", k) for k, s in enumerate(self.sections) if "farad" in s]
        names += [("l", k) for k, s in enumerate(self.sections) if "choke_h" in s]
        if self.leak:
            names += [("w", 0), ("w", 1)] if self.wiring == "full-wave" else [("w", 0)]
        if self.wiring == "doubler":
            names += [("d", 0), ("d", 1)]
        self.at = {name: i for i, name in enumerate(names)}
        self.size = len(names)

    # Parts

    def emf(self, t):
        x = self.omega * t
        return self.amplitude * (np.sin(x) + sum(a * np.sin(k * x) for k, a in self.case["harmonics"]))

    def diode_v(self, i):
        d = self.case["device"]
        if "perveance" in d:
            return (max(i, 0.0) / d["perveance"]) ** (2 / 3)
        return d["forward_v"] + d["on_ohm"] * i

    def diode_knee(self):
        return self.case["device"].get("forward_v", 0.0)

    def drop_v(self, i):
        return self.knee + self.drop_r * i + self.drop_root * np.sqrt(max(i, 0.0))

    def drawn(self, k, v):
        i = 0.0
        for load in self.case["loads"]:
            if load["node"] == k:
                if "bleeder_ohm" in load:
                    i += v / load["bleeder_ohm"]
                else:
                    i += load["idle_a"] * (v / load["at_v"]) ** load["law"]
        return i

    # The ladder of the filter

    def ladder(self, y, into):
        """Node voltages and the currents of the series parts, with `into` flowing into the first node."""
        v, i = np.zeros(self.n), np.zeros(self.n)
        i[0] = into
        for k, section in enumerate(self.sections):
            ahead = ("l", k + 1)
            last = k + 1 == self.n
            if k == 0 and self.wiring == "doubler":
                v[0] = y[self.at[("d", 0)]] + y[self.at[("d", 1)]]
            else:
                own = y[self.at[("c", k)]]
                esr = section.get("esr_ohm", 0.0)
                through_r = k > 0 and ("l", k) not in self.at
                if through_r and esr == 0.0:
                    i[k] = (v[k - 1] - own) / self.series_r[k]
                elif k > 0 and not through_r:
                    i[k] = y[self.at[("l", k)]]
                v[k] = own
                if esr > 0.0:
                    # A node behind a capacitor's resistance balances by itself; the next one must not depend on it.
                    assert last or ahead in self.at or self.sections[k + 1].get("esr_ohm", 0.0) == 0.0
                    x = own
                    for _ in range(50):
                        def left(x):
                            out = self.drawn(k, x) + (x - own) / esr
                            if not last:
                                out += (
                                    y[self.at[ahead]]
                                    if ahead in self.at
                                    else (x - y[self.at[("c", k + 1)]]) / self.series_r[k + 1]
                                )
                            return out - ((v[k - 1] - x) / self.series_r[k] if through_r else i[k])
                        h = 1e-6 * max(1.0, abs(x))
                        step = left(x) * 2 * h / (left(x + h) - left(x - h))
                        x -= step
                        if abs(step) < 1e-11 * abs(x):
                            break
                    v[k] = x
                    if through_r:
                        i[k] = (v[k - 1] - x) / self.series_r[k]
        return v, i

    def first_v(self, y, into):
        return self.ladder(y, into)[0][0]

    # Conduction

    def one_path(self, y, drive, own_r, with_drop, held=None):
        """Current of a path without inductance: drive − own_r·i − devices − dropper − first node = 0."""
        esr = self.sections[0].get("esr_ohm", 0.0)
        base = self.first_v(y, 0.0) if held is None else held
        if esr == 0.0 or held is not None:
            node = lambda i: base
        else:
            node = lambda i: self.first_v(y, i)
        def left(i):
            return drive - own_r * i - self.m * self.diode_v(i) - (self.drop_v(i) if with_drop else 0.0) - node(i)
        if left(0.0) <= 0.0:
            return 0.0
        high = 1e-3
        while left(high) > 0.0:
            high *= 4.0
        return brentq(left, 0.0, high, xtol=1e-17, rtol=1e-14)

    def currents(self, mode, t, y):
        """(ip, in) in a mode."""
        e = self.emf(t)
        if mode == OFF:
            return 0.0, 0.0
        if self.leak:
            w = y[self.at[("w", 0)]]
            if self.wiring == "full-wave":
                if mode == BOTH:
                    return w, y[self.at[("w", 1)]]
                return (w, 0.0) if mode == P else (0.0, y[self.at[("w", 1)]])
            if mode == BOTH:
                idc = y[self.at[("l", 0)]]
                return 0.5 * (idc + w), 0.5 * (idc - w)
            return (w, 0.0) if mode == P else (0.0, -w)
        if self.choke_input:
            idc = y[self.at[("l", 0)]]
            if mode != BOTH:
                return (idc, 0.0) if mode == P else (0.0, idc)
            # The winding's current between −idc and idc that balances both paths.
            if self.wiring == "bridge":
                left = lambda w: e - self.rs * w - self.diode_v(0.5 * (idc + w)) + self.diode_v(0.5 * (idc - w))
            else:
                left = lambda w: (
                    2 * e - self.rs * w - self.diode_v(0.5 * (idc + w)) + self.diode_v(0.5 * (idc - w))
                )
            if left(idc) >= 0.0:
                return idc, 0.0
            if left(-idc) <= 0.0:
                return 0.0, idc
            w = brentq(left, -idc, idc, xtol=1e-17, rtol=1e-14)
            return 0.5 * (idc + w), 0.5 * (idc - w)
        if self.wiring == "doubler":
            if mode == P:
                return self.one_path(y, e, self.rs, False, y[self.at[("d", 0)]]), 0.0
            return 0.0, self.one_path(y, -e, self.rs, True, y[self.at[("d", 1)]])
        drive = e if mode == P else -e
        i = self.one_path(y, drive, self.rs + self.series_r[0], True)
        return (i, 0.0) if mode == P else (0.0, i)

    def terminal_v(self, mode, t, y, ip, in_, di):
        """What the winding's ends hold in the direction of the single path that conducts."""
        e = self.emf(t)
        return e - self.rs * ip - self.leak * di if mode == P else -e - self.rs * in_ - self.leak * di

    def single_slope(self, mode, t, y):
        """Slope of a single path's current where inductance carries it."""
        e = self.emf(t)
        i = sum(self.currents(mode, t, y))
        drive = e if mode == P else -e
        if self.wiring == "doubler":
            held = y[self.at[("d", 0 if mode == P else 1)]]
            drop = self.drop_v(i) if mode == N else 0.0
            return (drive - self.rs * i - self.diode_v(i) - drop - held) / self.leak
        choke = self.sections[0].get("choke_h", 0.0)
        v0 = self.first_v(y, i)
        volts = drive - (self.rs + self.series_r[0]) * i - self.m * self.diode_v(i) - self.drop_v(i) - v0
        return volts / (self.leak + choke)

    def rhs(self, mode, t, y):
        dy = np.zeros(self.size)
        e = self.emf(t)
        ip, in_ = self.currents(mode, t, y)
        idc = ip + in_
        v, i = self.ladder(y, idc)
        for k, section in enumerate(self.sections):
            out = self.drawn(k, v[k]) + (i[k + 1] if k + 1 < self.n else 0.0)
            if k == 0 and self.wiring == "doubler":
                c1, c2 = self.case["doubler_f"]
                dy[self.at[("d", 0)]] = (ip - out) / c1
                dy[self.at[("d", 1)]] = (in_ - out) / c2
            else:
                dy[self.at[("c", k)]] = (i[k] - out) / section["farad"]
            if k > 0 and ("l", k) in self.at:
                dy[self.at[("l", k)]] = (v[k - 1] - v[k] - self.series_r[k] * i[k]) / section["choke_h"]
        if mode == OFF:
            return dy
        if mode in (P, N):
            if self.leak or self.choke_input:
                slope = self.single_slope(mode, t, y)
                if self.choke_input:
                    dy[self.at[("l", 0)]] = slope
                if self.leak:
                    if self.wiring == "full-wave":
                        dy[self.at[("w", 0 if mode == P else 1)]] = slope
                    else:
                        dy[self.at[("w", 0)]] = slope if mode == P else -slope
            return dy
        vp, vn = self.diode_v(ip), self.diode_v(in_)
        if self.wiring == "bridge":
            output = -vp - vn - self.drop_v(idc)
            if self.leak:
                dy[self.at[("w", 0)]] = (e - self.rs * (ip - in_) - vp + vn) / self.leak
        elif self.choke_input:
            # Both halves hold the output between them.
            output = 0.5 * (-self.rs * idc - vp - vn) - self.drop_v(idc)
            if self.leak:
                choke = self.sections[0]["choke_h"]
                total = (output - self.series_r[0] * idc - v[0]) / (choke + 0.5 * self.leak)
                apart = (2 * e - self.rs * (ip - in_) - vp + vn) / self.leak
                dy[self.at[("w", 0)]] = 0.5 * (total + apart)
                dy[self.at[("w", 1)]] = 0.5 * (total - apart)
                dy[self.at[("l", 0)]] = total
                return dy
        else:
            # Two halves with leakage on one reservoir: each for itself, but for the shared dropper.
            u = v[0] + self.series_r[0] * idc + self.drop_v(idc)
            dy[self.at[("w", 0)]] = (e - self.rs * ip - vp - u) / self.leak
            dy[self.at[("w", 1)]] = (-e - self.rs * in_ - vn - u) / self.leak
            return dy
        dy[self.at[("l", 0)]] = (output - self.series_r[0] * idc - v[0]) / self.sections[0]["choke_h"]
        return dy

    # Changes of mode

    def start_drive(self, path, mode, t, y):
        """What is left to make `path` conduct in `mode`: positive once it must."""
        e = self.emf(t) if path == P else -self.emf(t)
        knee = self.m * self.diode_knee()
        if mode == OFF:
            if self.wiring == "doubler":
                held = y[self.at[("d", 0 if path == P else 1)]]
                return e - knee - (self.knee if path == N else 0.0) - held
            return e - knee - self.knee - self.first_v(y, 0.0)
        i = sum(self.currents(mode, t, y))
        slope = self.single_slope(mode, t, y) if self.leak or self.choke_input else 0.0
        if self.wiring == "bridge":
            return 2 * (e + self.rs * i + self.leak * slope) + 2 * self.diode_v(i) - knee
        if self.wiring == "full-wave":
            return 2 * e + self.rs * i + self.leak * slope + self.diode_v(i) - knee
        held = y[self.at[("d", 0 if path == P else 1)]]
        drop = self.knee if path == N else 0.0
        return e + self.rs * i + self.leak * slope - self.diode_knee() - drop - held

    def changes(self, mode):
        """(event, next mode) pairs of a mode."""
        out = []
        paths = [P] if self.wiring == "half-wave" else [P, N]
        if mode == OFF:
            for path in paths:
                out.append((lambda t, y, path=path: self.start_drive(path, OFF, t, y), 1, path))
        elif mode in (P, N):
            index = 0 if mode == P else 1
            other = N if mode == P else P
            if self.leak or self.choke_input:
                out.append((lambda t, y: self.currents(mode, t, y)[index], -1, OFF))
                if other in paths and (self.choke_input or self.wiring == "full-wave"):
                    out.append((lambda t, y: self.start_drive(other, mode, t, y), 1, BOTH))
            else:
                out.append((lambda t, y: self.start_drive(mode, OFF, t, y), -1, OFF))
        else:
            if self.leak:
                out.append((lambda t, y: self.currents(BOTH, t, y)[1], -1, P))
                out.append((lambda t, y: self.currents(BOTH, t, y)[0], -1, N))
            else:
                # Without leakage both conduct while the voltage between the paths is less than they hold.
                def reach(t, y, sign):
                    idc = y[self.at[("l", 0)]]
                    times = 1 if self.wiring == "bridge" else 2
                    held = self.rs * idc + self.diode_v(idc) - self.diode_knee()
                    return sign * times * self.emf(t) - held
                out.append((lambda t, y: reach(t, y, 1), 1, P))
                out.append((lambda t, y: reach(t, y, -1), 1, N))
        return out

    def settle(self, y, mode):
        """Takes out what rounding leaves of currents that a change of mode has ended."""
        y = y.copy()
        w0, w1, choke = self.at.get(("w", 0)), self.at.get(("w", 1)), self.at.get(("l", 0))
        if mode == OFF:
            for i in (w0, w1, choke if self.choke_input else None):
                if i is not None:
                    y[i] = 0.0
        elif mode in (P, N) and self.leak:
            if self.wiring == "full-wave":
                y[w1 if mode == P else w0] = 0.0
                if self.choke_input:
                    y[w0 if mode == P else w1] = y[choke]
            elif self.choke_input:
                y[w0] = y[choke] if mode == P else -y[choke]
        return y

    def first_mode(self, t, y):
        if self.choke_input and y[self.at[("l", 0)]] > 0.0:
            return P if self.emf(t) > 0 else N
        for path in [P] if self.wiring == "half-wave" else [P, N]:
            if self.start_drive(path, OFF, t, y) > 0.0:
                return path
        return OFF

    def walk(self, start, keep=False):
        """One period from `start`; with `keep` also its stretches as (mode, dense solution, from, to)."""
        t, end = self.t0, self.t0 + self.period
        mode = self.first_mode(t, start)
        y = self.settle(start, mode)
        stretches = []
        for _ in range(60):
            changes = self.changes(mode)
            events = []
            for function, direction, _ in changes:
                event = lambda t, y, function=function: function(t, y)
                event.terminal, event.direction = True, direction
                events.append(event)
            now = mode
            run = solve_ivp(
                lambda t, y: self.rhs(now, t, y), (t, end), y, method="Radau", rtol=self.rtol, atol=self.rtol / 100,
                events=events, dense_output=keep, max_step=self.period / 40,
            )
            assert run.success, run.message
            if keep:
                stretches.append((mode, run.sol, t, run.t[-1]))
            t, y = run.t[-1], run.y[:, -1]
            if run.status == 0:
                return y, stretches
            which = next(k for k, found in enumerate(run.t_events) if len(found))
            before, mode = mode, changes[which][2]
            if mode == OFF and before != OFF and self.wiring != "half-wave":
                other = N if before == P else P
                if self.start_drive(other, OFF, t, self.settle(y, OFF)) > 0.0:
                    mode = other
            y = self.settle(y, mode)
        raise AssertionError("modes change without end")

    # The steady state

    def free(self):
        """States that are free at the start of the period: the winding's follow from the rest there."""
        return [i for name, i in self.at.items() if name[0] != "w"]

    def fill(self, x):
        y = np.zeros(self.size)
        y[self.free()] = x
        if self.leak and self.choke_input:
            y[self.at[("w", 0)]] = y[self.at[("l", 0)]]
        return y

    def steady(self):
        # A capacitor input is off where the wave rises through zero; a choke input is fed by one path at its peak.
        self.t0 = self.period / 4 if self.choke_input else 0.0
        free = self.free()
        peak = self.amplitude
        x = np.zeros(self.size)
        for (kind, k), i in self.at.items():
            first = 0.62 * peak if self.choke_input else 0.85 * peak
            x[i] = {"c": first * (2 if self.wiring == "doubler" else 1), "d": 0.85 * peak}.get(kind, 0.0)
            if kind == "l":
                x[i] = sum(self.drawn(j, first) for j in range(k, self.n))
        x = x[free]
        walk = lambda x: self.walk(self.fill(x))[0][free]
        for _ in range(3):
            x = walk(x)
        size = np.maximum(np.abs(x), 1e-3 * np.max(np.abs(x)))
        for round_ in range(25):
            here = walk(x)
            r = here - x
            if round_ % 3 == 0:
                m = np.zeros((len(x), len(x)))
                for j in range(len(x)):
                    h = 1e-5 * size[j]
                    moved = x.copy()
                    moved[j] += h
                    m[:, j] = (walk(moved) - here) / h
                inverse = np.linalg.inv(np.eye(len(x)) - m)
            step = inverse @ r
            x = x + step
            if np.max(np.abs(step) / size) < 10 * self.rtol:
                return x
        raise AssertionError("no steady state")

    def inverse_v(self, mode, t, y, ip, in_, v):
        e = self.emf(t)
        if self.wiring == "doubler":
            upper, lower = y[self.at[("d", 0)]], y[self.at[("d", 1)]]
            if mode == OFF:
                return max(upper - e, lower + e)
            drop = self.drop_v(in_) if mode == N else 0.0
            return upper + lower + self.diode_v(ip + in_) + drop
        if mode == BOTH:
            return 0.0
        if mode == OFF:
            if self.wiring == "half-wave":
                return v[0] - e
            forwards = min(max(abs(e) - v[0], 0.0), self.knee)
            across = v[0] + forwards + abs(e)
            return across / 2 if self.wiring == "bridge" else across
        if self.wiring == "half-wave":
            return 0.0
        di = self.single_slope(mode, t, y) if self.leak else 0.0
        ends = self.terminal_v(mode, t, y, ip, in_, di)
        device = self.diode_v(ip + in_)
        return ends - device if self.wiring == "bridge" else ends - device + abs(e)

    def measure(self):
        x = self.steady()
        end, stretches = self.walk(self.fill(x), keep=True)
        rows = []  # per stretch: t, v (n), i (n), ip, in, e, inverse
        for mode, sol, start, stop in stretches:
            if stop - start < 1e-12 * self.period:
                continue
            # Points crowd at a stretch's ends, where a valve's current leaves zero with a slope of its own.
            u = np.linspace(0.0, 1.0, SAMPLES)
            t = start + (stop - start) * u * u * (3 - 2 * u)
            table = []
            for tt in t:
                y = sol(tt)
                ip, in_ = self.currents(mode, tt, y)
                v, i = self.ladder(y, ip + in_)
                table.append([*v, *i, ip, in_, self.emf(tt), self.inverse_v(mode, tt, y, ip, in_, v)])
            rows.append((t, np.array(table)))
        n = self.n

        def mean(f):
            return sum(simpson(f(a), x=t) for t, a in rows) / self.period

        def top(f):
            return max(np.max(f(a)) for _, a in rows)

        ip, in_ = (lambda a: a[:, 2 * n]), (lambda a: a[:, 2 * n + 1])
        winding = lambda a: ip(a) - in_(a)
        square = mean(lambda a: winding(a) ** 2)
        if self.wiring == "full-wave":
            halves = [mean(lambda a: ip(a) ** 2), mean(lambda a: in_(a) ** 2)]
            winding_rms, winding_peak = max(halves) ** 0.5, max(top(ip), top(in_))
            loss = self.rs * sum(halves)
        else:
            winding_rms, winding_peak = square**0.5, top(lambda a: np.abs(winding(a)))
            loss = self.rs * square
        result = {
            "nodes": [
                {
                    "mean_v": mean(lambda a: a[:, k]),
                    "ripple_vpp": top(lambda a: a[:, k]) + top(lambda a: -a[:, k]),
                }
                for k in range(n)
            ],
            "winding_rms_a": winding_rms,
            "winding_peak_a": winding_peak,
            "diode_mean_a": max(mean(ip), mean(in_)),
            "diode_rms_a": max(mean(lambda a: ip(a) ** 2), mean(lambda a: in_(a) ** 2)) ** 0.5,
            "diode_peak_a": max(top(ip), top(in_)),
            "inverse_peak_v": top(lambda a: a[:, 2 * n + 3]),
            "winding_loss_w": loss,
            "dropper": None,
        }
        if self.case["dropper"]:
            if self.line_r:
                through = lambda a: a[:, n + 1]
                lost = lambda a: self.line_r * a[:, n + 1] ** 2
            else:
                through = in_ if self.wiring == "doubler" else (lambda a: ip(a) + in_(a))
                lost = lambda a: np.array([self.drop_v(i) * i for i in through(a)])
            loss_w = mean(lost)
            result["dropper"] = {"mean_v": loss_w / mean(through), "loss_w": loss_w}
        return result
