"""Sampled loops through the Lua module against a 50-digit simulation.

A second implementation, made of nothing of the engine's: matrix exponentials by mpmath at 50
digits, events in whole picoseconds, the laws' recurrences in double precision as documented.
Cases are drawn at a fixed seed. Each case must agree within 1e-12 of the largest value of its
sequence (1e-9 for stiff plants). SciPy's expm is compared on the way as a second library.

usage: python3 tests/long_reference.py N_CASES   (environment: LUA, LUA_PATH, LUA_CPATH)
"""
import math
import os
import random
import subprocess
import sys
import tempfile

import mpmath as mp

mp.mp.dps = 50
PS = 10 ** 12

PLANTS = {
    "integrator": ([[0]], [[250]], [[1]]),
    "lag": ([[-300]], [[300]], [[1]]),
    "underdamped": ([[0, 1], [-40000, -40]], [[0], [40000]], [[1, 0]]),
    "double integrator": ([[0, 1], [0, 0]], [[0], [2000]], [[1, 0.01]]),
    "defective": ([[-200, 1, 0], [0, -200, 1], [0, 0, -200]], [[0], [0], [8e6]], [[1, 0, 0]]),
    "stiff": ([[-1000001, -1000000], [1, 0]], [[1], [0]], [[0, 1e6]]),
    "unstable": ([[30, 1], [0, -100]], [[0], [50]], [[1, 0]]),
    "flexible": (
        [[-667, -61, 0, 0, 0, 0], [786, -88, -228571, 86, 0, 0], [0, 1, 0, -1, 0, 0],
         [0, 13, 35555, -14, -9000, 1], [0, 0, 0, 1, 0, -1], [0, 0, 0, 2, 8000, -3]],
        [[555], [0], [0], [0], [0], [0]], [[0, 0.02, 0, 0, 0, 0]]),
}
GAIN = {"integrator": 6, "lag": 2, "underdamped": 0.3, "double integrator": 0.5, "defective": 1,
        "stiff": 3, "unstable": 60, "flexible": 2}


class Plant:
    def __init__(self, a, b, c):
        self.n = len(a)
        self.m = mp.matrix(self.n + 1)
        for i in range(self.n):
            for j in range(self.n):
                self.m[i, j] = mp.mpf(float(a[i][j]))
            self.m[i, self.n] = mp.mpf(float(b[i][0]))
        self.c = [mp.mpf(float(v)) for v in c[0]]
        self.x = [mp.mpf(0)] * self.n
        self.t = 0
        self.u = 0.0
        self.cache = {}

    def move(self, t):
        dt = t - self.t
        if dt > 0:
            if dt not in self.cache:
                if len(self.cache) > 400:
                    self.cache.clear()
                scaled = self.m * (mp.mpf(dt) / PS)
                self.cache[dt] = mp.expm(scaled, method="taylor")
            e = self.cache[dt]
            v = self.x + [mp.mpf(self.u)]
            self.x = [mp.fdot([e[i, j] for j in range(self.n + 1)], v) for i in range(self.n)]
        self.t = t

    def y(self):
        return float(mp.fdot(self.c, self.x))


def quantise(y, bits, lo, hi):
    if not bits:
        return min(max(y, lo), hi) if lo is not None else y
    lsb = (hi - lo) / 2 ** bits
    code = min(max(round(y / lsb), round(lo / lsb)), round(hi / lsb) - 1)
    return code * lsb


class Law:
    def __init__(self, kind, kp, ki, kd, limit, period):
        self.kind, self.kp, self.ki, self.kd, self.limit = kind, kp, ki, kd, limit
        self.t, self.i, self.before = period, 0.0, None

    def step(self, wanted, measured):
        e = wanted - measured
        if self.kind == "p":
            u = self.kp * e
        elif self.kind == "pi":
            u = self.kp * e + self.i
        else:
            x = e if self.before is None else self.before
            u = self.kp * e + self.kd * ((e - x) / self.t)
            self.before = e
        lo, hi = self.limit if self.limit else (-math.inf, math.inf)
        out = min(max(u, lo), hi)
        if self.kind == "pi":
            di = self.ki * self.t * e
            pushes = (u > hi and di > 0) or (u < lo and di < 0)
            if not pushes:
                self.i += di
        return out


def ticks(seconds_text):
    """Picoseconds of a decimal number of seconds, halves up."""
    return int(mp.floor(mp.mpf(seconds_text) * PS + mp.mpf("0.5")))


def simulate(case):
    plant = Plant(*PLANTS[case["plant"]])
    period = case["period"]
    law = Law(case["law"], case["kp"], case["ki"], case["kd"], case["limit"], period / PS)
    writes, out, standing, missed = [], [], -1, 0
    reads = sorted(case["reads"])
    marks = [k * period for k in range(case["n"])]
    k = r = 0
    while k < len(marks) or r < len(reads):
        writes.sort(key=lambda w: (w[0], w[1]))
        t_write = writes[0][0] if writes else math.inf
        t_sample = marks[k] if k < len(marks) else math.inf
        t_read = reads[r] if r < len(reads) else math.inf
        t = min(t_write, t_sample, t_read)
        plant.move(t)
        if t_write == t:
            _, job, u = writes.pop(0)
            if case["arrival"] == "arrival" or job >= standing:
                standing = job
                plant.u = quantise(u, *case["dac"])
            continue
        if t_sample == t:
            entry = case["latency"][k % len(case["latency"])]
            if entry != "missed":
                measured = quantise(plant.y(), *case["adc"])
                u = law.step(case["wanted"], measured)
                if entry != "lost":
                    if entry == 0:
                        standing = max(standing, k)
                        plant.u = quantise(u, *case["dac"])
                    else:
                        writes.append((t + entry, k, u))
            k += 1
            continue
        out.append(plant.y())
        r += 1
    return out


def draw_case(rng, index):
    plant = rng.choice(list(PLANTS))
    period = rng.choice([50, 100, 173, 1000]) * 10 ** 6
    if plant in ("flexible", "defective"):
        period = rng.choice([50, 100]) * 10 ** 6
    n = 60
    kinds = {"list": rng.randint(2, 7), "one": 1}
    entries = []
    for _ in range(kinds[rng.choice(["one", "one", "list"])]):
        entries.append(ticks(repr(round(rng.choice([0, 0.5, 1, rng.uniform(0, 1), rng.uniform(0, 2.3)])
                                        * period / PS, 13))))
    if len(entries) > 2 and rng.random() < 0.6:
        entries[rng.randrange(1, len(entries))] = rng.choice(["lost", "missed"])
    law = rng.choice(["p", "pi", "pd"])
    limited = rng.random() < 0.4
    scale = 0.2 if any(e != "lost" and e != "missed" and e > period for e in entries) else 1
    case = {"plant": plant, "period": period, "n": n, "latency": entries, "law": law,
            "arrival": rng.choice(["arrival", "newest"]), "wanted": rng.choice([1.0, -0.5, 0.375]),
            "kp": round(GAIN[plant] * rng.uniform(0.2, 1) * scale, 3), "ki": 0.0, "kd": 0.0,
            "limit": (-4.0, 4.0) if limited else None,
            "adc": (12, -2.0, 2.0) if rng.random() < 0.4 else (0, None, None),
            "dac": (10, -8.0, 8.0) if rng.random() < 0.4 else (0, None, None)}
    if law == "pi":
        case["ki"] = round(case["kp"] * rng.uniform(1, 60), 3)
    if law == "pd":
        case["kd"] = round(case["kp"] * 0.2 * period / PS, 9)
    case["reads"] = sorted(rng.randrange(0, (n - 1) * period) for _ in range(40)) + \
        [k * period + 1 for k in range(0, n - 1, 3)]
    return case


def lua_case(c):
    a, b, m = PLANTS[c["plant"]]
    text = lambda v: "{" + ",".join(text(x) if isinstance(x, list) else repr(float(x)) for x in v) + "}"
    latency = ",".join(f'"{e}"' if isinstance(e, str) else f'"{e} ps"' for e in c["latency"])
    fields = [f"kp={c['kp']!r}"]
    if c["law"] == "pi":
        fields.append(f"ki={c['ki']!r}")
        if c["limit"]:
            fields.append('anti_windup="pause"')
    if c["law"] == "pd":
        fields.append(f"kd={c['kd']!r}")
    if c["limit"]:
        fields.append("limit={-4,4}")
    q = lambda v: f", bits={v[0]}, range={{{v[1]},{v[2]}}}" if v[0] else ""
    reads = ",".join(f'"{t} ps"' for t in sorted(c["reads"]))
    return f"""do
  local rig = lw.rig "case"
  rig:plant {{ "plant", lw.plant.state_space {{ A={text(a)}, B={text(b)}, C={text(m)} }} }}
  rig:adc {{ "adc", of="plant.out", every="{c['period']} ps"{q(c['adc'])} }}
  rig:dac {{ "dac", to="plant.in"{q(c['dac'])} }}
  rig:loop {{ "loop", law=lw.law.{c['law']} {{ {', '.join(fields)} }}, wanted={c['wanted']},
    measured="adc", output="dac", latency={{ {latency} }}, arrival="{c['arrival']}" }}
  local run = rig:run {{ lasts="{c['period'] * c['n']} ps", record={{ {{ "plant.out", at={{ {reads} }} }} }} }}
  local status, why = run:status()
  local r = run:record "plant.out"
  local out = {{}}
  for i = 1, r.n do out[i] = ("%.17g"):format(r.value[i]) end
  print(status == "done" and table.concat(out, " ") or "failed " .. tostring(why))
end
"""


# ---- cascades: two rates, a shared value, a moving disturbance, a delayed input

CASCADE = {  # states: current, speed, position-like; inputs: voltage, load
    "a": [[-400, -25, 0], [125, -6, -3000], [0, 1, 0]],
    "b": [[500, 0], [0, -60], [0, 0]],
}


class Axis:
    """CASCADE with its disturbance as extra states: z' = W z, load = z[0] + offset."""

    def __init__(self, case):
        self.case = case
        self.x = [mp.mpf(0)] * 3
        self.z = [mp.mpf(0)] * 2
        self.u = 0.0
        self.t = 0
        self.w = mp.mpf(0)
        if case["load"][0] == "sine":
            # the engine's angular frequency is the double 2 pi f
            self.w = mp.mpf(2 * math.pi * case["load"][2])
        self.cache = {}

    def turn(self, t):
        """Right limit of the generator's states at a corner."""
        kind = self.case["load"]
        if kind[0] == "ramp":
            _, at, slope, to, stop = kind
            self.z = [mp.mpf(slope) * (mp.mpf(t - at) / PS) if t < stop else mp.mpf(to),
                      mp.mpf(slope) if t < stop else mp.mpf(0)]
        else:
            _, amplitude, _, phase, at = kind
            self.z = [amplitude * mp.sin(phase), amplitude * mp.cos(phase)]

    def move(self, t):
        dt = t - self.t
        self.t = t
        if dt == 0:
            return
        if dt not in self.cache:
            if len(self.cache) > 300:
                self.cache.clear()
            m = mp.matrix(6)
            for i in range(3):
                for j in range(3):
                    m[i, j] = mp.mpf(CASCADE["a"][i][j])
                m[i, 3] = mp.mpf(CASCADE["b"][i][1])
                m[i, 5] = mp.mpf(CASCADE["b"][i][0])
            if self.w:
                m[3, 4], m[4, 3] = self.w, -self.w
            else:
                m[3, 4] = 1
            self.cache[dt] = mp.expm(m * (mp.mpf(dt) / PS), method="taylor")
        e = self.cache[dt]
        v = self.x + self.z + [mp.mpf(self.u)]
        new = [mp.fdot([e[i, j] for j in range(6)], v) for i in range(5)]
        self.x, self.z = new[:3], new[3:]


def simulate_cascade(c):
    """Order at one tick: corners, writes that are due, delayed input, samples, laws as declared."""
    axis = Axis(c)
    fast = Law("p", c["kp"], 0, 0, (-24.0, 24.0), c["fast"] / PS)
    slow = Law("pi", c["kps"], c["kis"], 0, (-6.0, 6.0), c["slow"] / PS)
    shared, pending, delayed, out = 0.0, [], [], []
    corners = sorted(c["corners"])
    reads = sorted(c["reads"])
    kf = ks = 0
    while reads:
        times = [c["fast"] * kf, c["slow"] * ks, reads[0]]
        times += [p[0] for p in pending] + [d[0] for d in delayed] + corners[:1]
        t = min(times)
        axis.move(t)
        if corners and corners[0] == t:
            axis.turn(t)
            corners.pop(0)
        for who in ("first", "second"):  # writes in order of declaration of their loops
            for p in sorted(p for p in pending if p[0] == t and p[1] == who):
                pending.remove(p)
                if (who == "first") == c["slow first"]:
                    shared = p[3]
                elif c["delay"]:
                    delayed.append((t + c["delay"], p[3]))
                else:
                    axis.u = p[3]
        for d in [d for d in delayed if d[0] == t]:
            delayed.remove(d)
            axis.u = d[1]
        samples = {}
        if c["fast"] * kf == t:
            samples["fast"] = float(axis.x[0])
        if c["slow"] * ks == t:
            samples["slow"] = float(axis.x[1])
        for rate in (("slow", "fast") if c["slow first"] else ("fast", "slow")):
            if rate not in samples:
                continue
            who = "first" if (rate == "slow") == c["slow first"] else "second"
            if rate == "slow":
                u = slow.step(1.5, samples[rate])
                latency = c["lag slow"][ks % len(c["lag slow"])]
                if latency == 0:
                    shared = u
                else:
                    pending.append((t + latency, who, ks, u))
                ks += 1
            else:
                u = min(max(fast.step(shared, samples[rate]), -24.0), 24.0)
                if c["lag fast"] == 0 and not c["delay"]:
                    axis.u = u
                elif c["lag fast"] == 0:
                    delayed.append((t + c["delay"], u))
                else:
                    pending.append((t + c["lag fast"], who, kf, u))
                kf += 1
        while reads and reads[0] == t:
            out.append(float(axis.x[1]))
            reads.pop(0)
    return out


def draw_cascade(rng):
    fast = rng.choice([40, 50, 70]) * 10 ** 6
    slow = fast * rng.choice([5, 8, 10])
    c = {"fast": fast, "slow": slow, "kp": round(rng.uniform(0.5, 4), 3),
         "kps": round(rng.uniform(0.5, 3), 3), "kis": round(rng.uniform(5, 60), 2),
         "lag fast": rng.choice([0, fast, ticks(repr(round(rng.uniform(0.05, 0.95) * fast / PS, 12)))]),
         "lag slow": rng.choice([[0], [slow], [slow // 2 + 1234, 0, slow], [fast, 2 * fast + 5]]),
         "slow first": rng.random() < 0.5,
         "delay": rng.choice([0, 0, 12345678, fast, 3 * fast])}
    at = rng.choice([10 ** 9, 123456789, 2 * fast])
    if rng.random() < 0.5:
        slope, to = 30.0, 0.25
        stop = ticks(repr(at / PS + to / slope))
        c["load"] = ("ramp", at, slope, to, stop)
        c["corners"] = [at, stop]
    else:
        c["load"] = ("sine", 0.5, rng.choice([50.0, 333.0]), 0.7, at)
        c["corners"] = [at]
    c["reads"] = sorted(rng.randrange(0, 60 * slow // 10) for _ in range(40))
    return c


def lua_cascade(c):
    a = "{" + ",".join("{" + ",".join(map(repr, r)) + "}" for r in CASCADE["a"]) + "}"
    b = "{" + ",".join("{" + ",".join(map(repr, r)) + "}" for r in CASCADE["b"]) + "}"
    load = c["load"]
    if load[0] == "ramp":
        source = f'ramp {{ at="{load[1]} ps", slope={load[2]}, to={load[3]} }}'
    else:
        source = (f'sine {{ amplitude={load[1]}, frequency={load[2]}, phase={load[3]}, '
                  f'at="{load[4]} ps" }}')
    lags = ",".join(f'"{v} ps"' for v in c["lag slow"])
    slow = f"""  rig:loop {{ "slow loop", wanted=1.5, measured="slow", output="shared",
    latency={{ {lags} }}, law=lw.law.pi {{ kp={c['kps']}, ki={c['kis']}, limit={{-6,6}},
    anti_windup="pause" }} }}
"""
    fast = f"""  rig:loop {{ "fast loop", wanted="shared", measured="fast", output="dac",
    latency="{c['lag fast']} ps", law=lw.law.p {{ kp={c['kp']}, limit={{-24,24}} }} }}
"""
    reads = ",".join(f'"{t} ps"' for t in c["reads"])
    return f"""do
  local rig = lw.rig "case"
  rig:plant {{ "axis", lw.plant.state_space {{ A={a}, B={b}, C={{{{1,0,0}},{{0,1,0}}}},
    inputs={{"voltage","load"}}, outputs={{"current","speed"}},
    delay={{ voltage="{c['delay']} ps" }} }} }}
  rig:source {{ "load wave", lw.source.{source} }}
  rig:connect {{ "load wave", to="axis.load" }}
  rig:value {{ "shared" }}
  rig:adc {{ "fast", of="axis.current", every="{c['fast']} ps" }}
  rig:adc {{ "slow", of="axis.speed", every="{c['slow']} ps" }}
  rig:dac {{ "dac", to="axis.voltage" }}
{slow + fast if c['slow first'] else fast + slow}
  local run = rig:run {{ lasts="{6 * c['slow']} ps",
    record={{ {{ "axis.speed", at={{ {reads} }} }} }} }}
  local status, why = run:status()
  local r = run:record "axis.speed"
  local out = {{}}
  for i = 1, r.n do out[i] = ("%.17g"):format(r.value[i]) end
  print(status == "done" and table.concat(out, " ") or "failed " .. tostring(why))
end
"""


def scipy_agrees():
    """SciPy's exponential agrees with mpmath's on every plant here (a second library)."""
    try:
        import numpy
        import scipy.linalg
    except ImportError:
        return None
    for name, (a, b, _) in PLANTS.items():
        m = numpy.zeros((len(a) + 1, len(a) + 1))
        m[:-1, :-1], m[:-1, -1] = a, [r[0] for r in b]
        got = scipy.linalg.expm(m * 1e-4)
        want = mp.expm(mp.matrix(m.tolist()) * mp.mpf(1e-4), method="taylor")
        for i in range(len(m)):
            scale = max(abs(float(want[i, j])) for j in range(len(m)))
            for j in range(len(m)):
                if abs(got[i, j] - float(want[i, j])) > 1e-9 * scale:
                    return False
    return True


def main():
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    rng = random.Random(20240607)
    cases = [draw_case(rng, i) for i in range(n)]
    cascades = [draw_cascade(rng) for _ in range(n // 2)]
    with tempfile.NamedTemporaryFile("w", suffix=".lua", delete=False) as f:
        f.write('local lw = require "latewood"\n' + "".join(map(lua_case, cases)) +
                "".join(map(lua_cascade, cascades)))
    lines = subprocess.run([os.environ.get("LUA", "lua5.4"), f.name], check=True,
                           capture_output=True, text=True).stdout.splitlines()
    os.unlink(f.name)
    passed = failed = 0
    worst = 0.0
    for case, line in zip(cases + cascades, lines):
        want = simulate(case) if "plant" in case else simulate_cascade(case)
        if line.startswith("failed"):
            print("case", case, line)
            failed += 1
            continue
        got = [float(v) for v in line.split()]
        scale = max(max(map(abs, want)), 1e-300)
        error = max(abs(x - y) for x, y in zip(got, want)) / scale
        limit = 1e-9 if case.get("plant") == "stiff" else 1e-12
        worst = max(worst, error / limit)
        if len(got) != len(want) or not error <= limit:
            failed += 1
            print(f"differs by {error:.3g} of its scale {scale:.3g}: {case}")
        else:
            passed += 1
    second = scipy_agrees()
    if second is not None:
        passed, failed = passed + second, failed + (not second)
    print(f"worst error {worst:.3g} of what is permitted")
    print(f"{passed} passed, {failed} failed")
    return failed != 0


if __name__ == "__main__":
    sys.exit(main())
