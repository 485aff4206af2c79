#!/usr/bin/env python3
"""Makes the log of Quillet Moor, an INVENTED site, and the truth behind it.

    python3 generate.py            writes log.csv and truth.json beside this file, and prints a summary
    python3 generate.py --plot F   also draws the log into the picture F (needs matplotlib)

Needs numpy and scipy. Nothing here is shared with borewake itself: the ground is a rectilinear finite-volume lattice of
its own, and its transmissivity varies from place to place in a way that site.toml does not tell.

How the truth is made
  ground   S dp/dt = div(T grad p) + wells, five-point fluxes with harmonic means of T between nodes;
           ln T is a smooth random field, standard deviation 0.3, correlation length half the array's reach
  wells    the bore's pressure follows from the node's by the equivalent radius of a well on a square lattice,
           0.198 of the spacing (Peaceman, SPE Journal 18(3), 1978), plus skin
  time     Galerkin projection on (K + s M)^-1 B for real shifts s, then exact steps of the modes for rates that are
           held from one instant to the next
  gauges   white noise, an offset, and a slow drift within specification
  meters   a bias and a slow wander, both a share of the rate; the log holds what the meters say

Rates hold from their row until the next; pressures are samples at their row's instant.
"""
import json
import pathlib
import sys

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as sl

HERE = pathlib.Path(__file__).resolve().parent
SEED = 20310301
DAY, DT, YEAR = 86400.0, 600.0, 365 * 86400.0
START, DAYS, PAST_DAYS = np.datetime64("2031-03-01T00:00:00"), 100, 365

# The ground as it is. site.toml starts some 20 % off in T and S and knows nothing of skins and of the variation of T.
MEAN_T = 3.5e-9            # m3/(Pa s)
STORATIVITY = 3.4e-9       # m/Pa
SIGMA_LN_T = 0.3           # standard deviation of ln T
REACH = 1200.0             # m, reach of the array; T varies over half of it
RADIUS = 0.11              # m, of every well

# name, place [m], skin
WELLS = [("Q-1", (0.0, 0.0), 2.1), ("Q-2", (720.0, -310.0), 0.6), ("Q-3", (-420.0, -680.0), 3.4)]
OBSERVATION = [("M-1", (-640.0, 150.0)), ("M-2", (310.0, 560.0)), ("M-3", (180.0, -960.0))]
NEIGHBOUR = ("Cobb disposal well", (1700.0, -160.0))

# What happens, in days since the start of the log.
LEAK_AT, LEAK_DAY, LEAK_GROWS, LEAK_SHARE = (-130.0, -430.0), 48.25, 6.0, 0.036
STEP_GAUGE, STEP_DAY, STEP_SIZE = "M-2", 70.4, 3.2e3
NEIGHBOUR_DAY, NEIGHBOUR_RATE = 85.1, 90.0 / DAY

# Planned rates [m3/d] from a day of the log on. Days 0 to 40 exercise every well for the commissioning.
PLAN = {
    "Q-1": [(0, 380), (4.3, 300), (8.1, 0), (10.2, 400), (17.5, 340), (24.2, 0), (25.9, 390), (33.4, 420), (41.6, 360),
            (52.3, 400), (59.2, 0), (60.8, 380), (67.1, 420), (78.3, 370), (82.2, 0), (83.3, 400), (93.5, 350)],
    "Q-2": [(0, 310), (2.4, 0), (5.6, 280), (12.7, 350), (19.3, 0), (21.8, 320), (29.1, 260), (36.3, 330), (45.2, 280),
            (56.1, 330), (63.4, 300), (74.6, 0), (76.0, 320), (88.7, 280), (96.2, 330)],
    "Q-3": [(0, 240), (6.2, 290), (14.4, 0), (16.3, 250), (22.9, 300), (27.6, 0), (31.2, 270), (38.5, 240), (50.4, 290),
            (55.2, 260), (65.3, 0), (66.4, 290), (72.9, 250), (80.5, 280), (91.1, 240)],
}
PAST_SINCE = {"Q-1": -365, "Q-2": -300, "Q-3": -210}       # day of first injection

# What the log lacks: (first day, last day, gauge or None for the whole logger)
GAPS = [(19.60, 19.77, None), (61.7, 63.7, "M-1"), (79.30, 79.47, None)]
SCATTERED = 0.004          # share of single samples lost

NOISE, DRIFT_SPEC = 100.0, 2.0e3                           # Pa; Pa a year
METER_BIAS, METER_WANDER, METER_MEMORY = 0.005, 0.0035, 2 * DAY


def lattice_lines(stops, spacing, growth, reach):
    """Lines of one axis: through every stop, `spacing` apart there (four on either side), growing geometrically between."""
    stops = np.unique(stops)
    if np.diff(stops).min() < 10 * spacing:
        raise SystemExit("two places share nearly the same lattice line: move one")
    def away(length):
        """Distances from a stop outward, up to about `length`."""
        out, step = [0.0], spacing
        while out[-1] < length:
            step = step if len(out) <= 4 else step * growth
            out.append(out[-1] + step)
        return np.array(out)
    lines = [stops[0] - away(reach)[::-1], stops[-1] + away(reach)]
    for a, b in zip(stops[:-1], stops[1:]):
        half = away((b - a) / 2)
        tail = half[5:] - half[4]                          # the growing part is stretched to meet in the middle
        half = np.r_[half[:5], half[4] + tail * ((b - a) / 2 - half[4]) / tail[-1]]
        lines += [a + half, b - half]
    lines = np.unique(np.round(np.concatenate(lines), 6))
    return lines


class Lattice:
    """The ground on a rectilinear lattice with nodes at every place of interest, reduced to its modes."""

    def __init__(self, places, sigma, rng, spacing=10.0, growth=1.22, reach=40e3):
        places = np.array(places)
        x, y = (lattice_lines(places[:, i], spacing, growth, reach) for i in (0, 1))
        self.spacing, self.shape = spacing, (len(x), len(y))
        X, Y = np.meshgrid(x, y, indexing="ij")
        wave, phase = rng.normal(0, 1 / (REACH / 2), (400, 2)), rng.uniform(0, 2 * np.pi, 400)
        field = np.zeros(X.shape)
        for k, p in zip(wave, phase):
            field += np.cos(X * k[0] + Y * k[1] + p)
        self.lnT = sigma * np.sqrt(2 / 400) * field
        T = MEAN_T * np.exp(self.lnT)
        width = [np.gradient(v) for v in (x, y)]
        for w, v in zip(width, (x, y)):                    # control volumes reach half way to the neighbours
            w[1:-1], w[0], w[-1] = (v[2:] - v[:-2]) / 2, (v[1] - v[0]) / 2, (v[-1] - v[-2]) / 2
        number = np.arange(X.size).reshape(X.shape)
        rows, columns, values = [], [], []
        for axis in (0, 1):
            near, far = (np.s_[:-1], np.s_[1:]) if axis == 0 else (np.s_[:, :-1], np.s_[:, 1:])
            mean = 2 * T[near] * T[far] / (T[near] + T[far])
            face, length = (width[1][None, :], np.diff(x)[:, None]) if axis == 0 else (width[0][:, None], np.diff(y)[None, :])
            flux, i, j = (mean * face / length).ravel(), number[near].ravel(), number[far].ravel()
            rows += [i, j, i, j]
            columns += [j, i, i, j]
            values += [-flux, -flux, flux, flux]
        K = sp.csc_matrix((np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))), shape=(X.size,) * 2)
        M = sp.diags((STORATIVITY * np.outer(*width)).ravel()).tocsc()
        self.node = [number[np.argmin(abs(x - p[0])), np.argmin(abs(y - p[1]))] for p in places]
        B = np.zeros((X.size, len(places)))
        B[self.node, range(len(places))] = 1
        shifts = np.logspace(np.log10(1 / (20 * YEAR)), np.log10(1 / 100.0), 26)
        V = np.hstack([sl.splu((K + s * M).tocsc(), permc_spec="MMD_AT_PLUS_A").solve(B) for s in shifts])
        V /= np.sqrt(np.einsum("ij,ij->j", V, M @ V))
        for tolerance in (1e-13, 0.0):                     # orthonormal in M, twice for rounding
            w, Q = np.linalg.eigh(V.T @ (M @ V))
            keep = w > tolerance * w[-1]
            V = V @ (Q[:, keep] / np.sqrt(w[keep]))
        self.decay, Q = np.linalg.eigh(V.T @ (K @ V))
        self.decay = np.maximum(self.decay, 0)
        self.ports = (V @ Q)[self.node]
        self.T_at = T.ravel()[self.node]

    def respond(self, rates):
        """Pressure change at every place [Pa] at the start of each step, for rates [m3/s] held over each step."""
        z = self.decay * DT
        fade = np.exp(-z)
        gain = np.where(z > 1e-9, -np.expm1(-z) / np.maximum(self.decay, 1e-300), DT)
        push, state, out = rates @ (self.ports * gain), np.zeros(len(z)), np.empty(rates.shape)
        for k in range(len(rates)):
            out[k] = self.ports @ state
            state = fade * state + push[k]
        return out

    def well_drop(self, place, skin):
        """Bore above node pressure for a unit rate [Pa s/m3]."""
        return (np.log(0.198 * self.spacing / RADIUS) + skin) / (2 * np.pi * self.T_at[place])


def wander(rng, n, memory, columns):
    """A stationary process of unit variance that forgets over `memory` seconds, one column each."""
    f, out = np.exp(-DT / memory), np.empty((n, columns))
    out[0] = rng.normal(size=columns)
    for k in range(1, n):
        out[k] = f * out[k - 1] + np.sqrt(1 - f * f) * rng.normal(size=columns)
    return out


def true_rates(rng):
    """Rates of every well [m3/s] from the first injection on, with the pumps' own unsteadiness of 0.6 %."""
    before, n = int(PAST_DAYS * DAY / DT), int((PAST_DAYS + DAYS) * DAY / DT)
    day = np.arange(n) * DT / DAY - PAST_DAYS
    q = np.zeros((n, len(WELLS)))
    for w, (name, _, _) in enumerate(WELLS):
        usual = PLAN[name][0][1]
        at = float(PAST_SINCE[name])
        while at < 0:
            lasts = rng.uniform(4, 25)
            level = 0 if rng.uniform() < 0.12 else usual * rng.uniform(0.7, 1.15)
            q[(day >= at) & (day < min(at + lasts, 0)), w] = level
            at += lasts if level else min(lasts, 5)
        for (a, level), (b, _) in zip(PLAN[name], PLAN[name][1:] + [(DAYS + 1, 0)]):
            q[(day >= a) & (day < b), w] = level
    return q / DAY * (1 + 0.006 * wander(rng, n, 0.3 * DAY, len(WELLS))), before


def stamp(day):
    return str(START + np.timedelta64(int(round(day * DAY / DT) * DT), "s")) + "Z"


def check_against_line_source():
    """Largest error of the lattice on even ground against the line source, as a share of each response's peak."""
    from scipy.special import exp1
    places = [p for _, p, _ in WELLS] + [p for _, p in OBSERVATION] + [NEIGHBOUR[1], LEAK_AT]
    even = Lattice(places, 0.0, np.random.default_rng(0))
    n = int(60 * DAY / DT)
    q = np.zeros((n, len(places)))
    q[:, 0] = 1e-3
    p = even.respond(q)[1:]
    p[:, 0] += q[1:, 0] * even.well_drop(0, 0.0)
    t, worst = np.arange(1, n) * DT, 0.0
    for i, place in enumerate(places):
        r = max(np.hypot(*np.subtract(place, places[0])), RADIUS)
        exact = 1e-3 * exp1(r * r * STORATIVITY / (4 * MEAN_T * t)) / (4 * np.pi * MEAN_T)
        worst = max(worst, np.abs(p[:, i] - exact).max() / exact.max())
    print(f"lattice {even.shape[0]} x {even.shape[1]}, worst error against the line source on even ground {worst:.1e}")


def main():
    rng = np.random.default_rng(SEED)
    places = [p for _, p, _ in WELLS] + [p for _, p in OBSERVATION] + [NEIGHBOUR[1], LEAK_AT]
    W, gauges = len(WELLS), [f"{n}" for n, _, _ in WELLS] + [n for n, _ in OBSERVATION]
    G, neighbour, leak = len(gauges), len(places) - 2, len(places) - 1
    ground = Lattice(places, SIGMA_LN_T, rng)
    q, before = true_rates(rng)
    n = len(q) - before
    day = np.arange(len(q)) * DT / DAY - PAST_DAYS

    # every rate into or out of the ground, by place
    rates = np.zeros((len(q), len(places)))
    rates[:, :W] = q
    total = q[before:].sum(1).mean()
    rates[:, leak] = -LEAK_SHARE * total * np.clip((day - LEAK_DAY) / LEAK_GROWS, 0, 1)
    rates[day >= NEIGHBOUR_DAY, neighbour] = NEIGHBOUR_RATE
    p = ground.respond(rates)[before:, :G]
    for w, (_, _, skin) in enumerate(WELLS):
        p[:, w] += q[before - 1 : -1, w] * ground.well_drop(w, skin)

    day, q = day[before:], q[before:]
    rest = np.array([14.62e6, 14.71e6, 14.55e6, 14.41e6, 14.49e6, 14.66e6])     # absolute, at each gauge's depth
    shown = rest + p + rng.normal(0, NOISE, (n, G))
    shown += np.outer(day / 365, rng.normal(0, DRIFT_SPEC / 2, G))
    shown[day >= STEP_DAY, gauges.index(STEP_GAUGE)] += STEP_SIZE
    bias = np.array([0.004, -0.006, 0.003])
    metered = q * (1 + bias + METER_WANDER * wander(rng, n, METER_MEMORY, W))

    lost = rng.uniform(size=(n, W + G)) < SCATTERED
    for w, (name, _, _) in enumerate(WELLS):               # the instant of a planned change is always logged
        for at, _ in PLAN[name]:
            lost[abs(day - at) < 1 / 24, w] = False
    no_row = np.zeros(n, bool)
    for a, b, who in GAPS:
        within = (day >= a) & (day < b)
        if who is None:
            no_row |= within
        else:
            lost[within, W + gauges.index(who)] = True

    channels = [f"{g.lower().replace('-', '')}.{what}" for what, gs in (("rate", gauges[:W]), ("pressure", gauges)) for g in gs]
    with open(HERE / "log.csv", "w", newline="\n") as out:
        out.write("time," + ",".join(channels) + "\n")
        for k in np.flatnonzero(~no_row):
            cells = [f"{v * DAY:.1f}" for v in metered[k]] + [f"{v / 1e3:.2f}" for v in shown[k]]
            out.write(stamp(day[k]) + "," + ",".join("" if gone else c for c, gone in zip(cells, lost[k])) + "\n")

    point = lambda p: {"x": p[0], "y": p[1]}
    truth = {
        "about": "Invented. Made by generate.py; no such site exists.",
        "from": stamp(0), "to": stamp(DAYS), "commission": {"from": stamp(0), "to": stamp(40)},
        "events": [
            {"cause": "leak", "onset": stamp(LEAK_DAY), "place": point(LEAK_AT), "grows_s": LEAK_GROWS * DAY,
             "size": {"value": round(LEAK_SHARE * total, 9), "unit": "m3/s"}, "share_of_injection": LEAK_SHARE},
            {"cause": "gauge-step", "onset": stamp(STEP_DAY), "gauge": STEP_GAUGE, "size": {"value": STEP_SIZE, "unit": "Pa"}},
            {"cause": "interference", "onset": stamp(NEIGHBOUR_DAY), "neighbour": NEIGHBOUR[0], "place": point(NEIGHBOUR[1]),
             "size": {"value": round(NEIGHBOUR_RATE, 9), "unit": "m3/s"}},
        ],
        "gaps": [{"from": stamp(a), "to": stamp(b), "gauge": who} for a, b, who in GAPS],
        "ground": {"transmissivity": MEAN_T, "storativity": STORATIVITY, "sd_ln_transmissivity": SIGMA_LN_T,
                   "correlation_m": REACH / 2, "transmissivity_at_wells": [float(f"{v:.4g}") for v in ground.T_at[:W]]},
        "wells": [{"name": name, "skin": skin, "meter_bias": float(b)} for (name, _, skin), b in zip(WELLS, bias)],
        "gauges": {"noise_pa": NOISE, "drift_specification_pa_per_year": DRIFT_SPEC},
    }
    (HERE / "truth.json").write_text(json.dumps(truth, indent=2) + "\n")

    check_against_line_source()
    print(f"mean injection {total * DAY:.0f} m3/d, leak {LEAK_SHARE * total * DAY:.1f} m3/d")
    print("ln T at wells, gauges, neighbour, leak:", np.round(np.log(ground.T_at / MEAN_T), 2))
    for g, name in enumerate(gauges):
        print(f"{name}: {(shown[:, g].min() - rest[g]) / 1e6:.2f} to {(shown[:, g].max() - rest[g]) / 1e6:.2f} MPa above rest")
    if "--plot" in sys.argv:
        plot(sys.argv[sys.argv.index("--plot") + 1], day, metered, shown, no_row, lost, gauges)


def plot(path, day, metered, shown, no_row, lost, gauges):
    import matplotlib
    matplotlib.use("Agg")
    import matplotlib.pyplot as plt
    W, (_, axes) = len(WELLS), plt.subplots(len(gauges) + 1, 1, figsize=(13, 16), sharex=True)
    for w in range(W):
        axes[0].plot(day, metered[:, w] * DAY, lw=0.7, label=gauges[w])
    axes[0].set_ylabel("m3/d")
    axes[0].legend()
    for g, name in enumerate(gauges):
        values = np.where(no_row | lost[:, W + g], np.nan, shown[:, g]) / 1e3
        axes[g + 1].plot(day, values, lw=0.6)
        axes[g + 1].set_ylabel(f"{name} kPa")
        for at in (LEAK_DAY, STEP_DAY, NEIGHBOUR_DAY):
            axes[g + 1].axvline(at, color="r", lw=0.5)
    axes[-1].set_xlabel("day")
    plt.tight_layout()
    plt.savefig(path, dpi=70)


if __name__ == "__main__":
    main()
