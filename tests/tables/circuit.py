"""The equivalent circuit of src/core/cell.h as a linear least-squares problem.

With the time constants, the activation energy and the open-circuit curve given, the terminal
voltage is linear in the resistances at their charge points:

    V = OCV(z) - sum_k R0_k h_k(z) f I - sum_k R1_k L1[h_k(z) f I] - sum_k R2_k L2[h_k(z) f I]

h_k are hat functions (linear between the points, held outside), f the Arrhenius factor of the
row's temperature, L a first-order low-pass. So R0, R1 and R2 come out of one bounded linear fit;
the time constants and the activation energy are searched over a grid around it.
"""

import data
import numpy as np
from scipy.interpolate import PchipInterpolator
from scipy.optimize import lsq_linear

GAS = 8.314462618
REF_C = 25.0


class Log:
    """One measured log. `gap_s`: a longer step starts a new run, taken as rested."""

    def __init__(self, path, capacity, gap_s=100.0, temp=None, weight=1.0, most=None,
                 shift=False, skip_s=0.0, until_s=np.inf, thin=1):
        col = data.columns(path)
        self.t, self.V, self.I = col["time_s"], col["voltage_V"], col["current_A"]
        self.z = 1.0 - col["charge_Ah"] / capacity
        self.temp = col.get("temp_C", np.full(len(self.t), REF_C if temp is None else temp))
        # A row counts by the time it stands for: rests are logged more thinly than pulses.
        self.weight = weight * np.clip(np.gradient(self.t), 0.5, 60.0)
        if most is not None:  # rows with more current tell of a load no small computer has
            self.weight[np.abs(self.I) > most] = 0.0
        self.weight[(self.t < skip_s) | (self.t > until_s)] = 0.0
        self.weight[np.arange(len(self.t)) % thin != 0] = 0.0
        step = np.diff(self.t)
        jump = np.abs(np.diff(self.z) * capacity + self.I[1:] * step / 3600.0) > 0.01
        self.run = np.concatenate(([0], np.cumsum((step > gap_s) | ((step > 20.0) & jump))))
        self.shift = shift  # a free offset of the curve for each run

    def lowpass(self, x, tau):
        """x: (rows, columns); the mean of neighbouring samples is held over a step."""
        out = np.zeros_like(x)
        fade = np.exp(-np.diff(self.t) / tau)
        new = np.diff(self.run) > 0
        for i in range(1, len(self.t)):
            if not new[i - 1]:
                out[i] = fade[i - 1] * out[i - 1] + (1 - fade[i - 1]) * 0.5 * (x[i] + x[i - 1])
        return out


def hats(points, z):
    """Rows of weights that interpolate linearly over points, held outside."""
    z = np.atleast_1d(np.clip(z, points[0], points[-1]))
    i = np.clip(np.searchsorted(points, z, side="right") - 1, 0, len(points) - 2)
    share = (z - points[i]) / (points[i + 1] - points[i])
    out = np.zeros((len(z), len(points)))
    rows = np.arange(len(z))
    out[rows, i] = 1 - share
    out[rows, i + 1] = share
    return out


def arrhenius(energy, temp_C):
    return np.exp(energy / GAS * (1 / (temp_C + 273.15) - 1 / (REF_C + 273.15)))


def curve(table):
    """PCHIP with the end's tangent going on, as src/core/ocv.c has it."""
    z, v = table
    p = PchipInterpolator(z, v)
    d = p.derivative()

    def at(x):
        x = np.asarray(x, float)
        inside = np.clip(x, z[0], z[-1])
        return p(inside) + (x - inside) * d(inside)
    return at


class Problem:
    """Logs, charge points of the resistances, and optionally points where the curve may move."""

    def __init__(self, logs, ocv, points, ocv_points=None, ocv_pull=0.02, smooth=0.01,
                 rest_current=0.0):
        self.logs, self.ocv, self.points = logs, curve(ocv), np.asarray(points, float)
        self.ocv_points = None if ocv_points is None else np.asarray(ocv_points, float)
        self.ocv_pull, self.smooth = ocv_pull, smooth
        # The curve was measured under this small current: its polarisation is part of the fit.
        self.rest_current = rest_current

    def rows(self, log, tau1, tau2, energy):
        load = hats(self.points, log.z) * (arrhenius(energy, log.temp) * log.I)[:, None]
        u1, u2 = log.lowpass(load, tau1), log.lowpass(load, tau2)
        under = hats(self.points, log.z) * self.rest_current
        return np.hstack([under - load, under - u1, under - u2])

    def system(self, tau1, tau2, energy):
        n = len(self.points)
        shifts = [(k, r) for k, log in enumerate(self.logs) if log.shift
                  for r in range(log.run[-1] + 1)]
        m = 0 if self.ocv_points is None else len(self.ocv_points)
        blocks, targets = [], []
        for k, log in enumerate(self.logs):
            use = log.weight > 0
            a = np.zeros((use.sum(), 3 * n + m + len(shifts)))
            a[:, :3 * n] = self.rows(log, tau1, tau2, energy)[use]
            if m:
                a[:, 3 * n:3 * n + m] = hats(self.ocv_points, log.z[use])
            for j, (kk, r) in enumerate(shifts):
                if kk == k:
                    a[log.run[use] == r, 3 * n + m + j] = 1
            w = np.sqrt(log.weight[use])[:, None]
            blocks.append(a * w)
            targets.append((log.V - self.ocv(log.z))[use] * w[:, 0])
        return np.vstack(blocks), np.concatenate(targets), n, m, len(shifts)

    def penalties(self, n, m, s, rows, scale):
        """Smooth resistances: their second difference over the points, as a share of themselves
        (scale), counts like a residual of `smooth` volts. A small curve correction, small
        offsets."""
        out = []
        width = np.diff(self.points)
        for i in range(3 * n):
            block, k = divmod(i, n)
            if 0 < k < n - 1:
                line = np.zeros(3 * n + m + s)
                h0, h1 = width[k - 1:k + 1]
                line[i - 1:i + 2] = np.array([h1, -(h0 + h1), h0]) / (h0 + h1)
                out.append(line * self.smooth * np.sqrt(rows) / scale[i])
        for j in range(m):
            line = np.zeros(3 * n + m + s)
            line[3 * n + j] = self.ocv_pull * np.sqrt(rows)
            out.append(line)
        for j in range(s):
            line = np.zeros(3 * n + m + s)
            line[3 * n + m + j] = 1.0
            out.append(line)
        return np.array(out).reshape(-1, 3 * n + m + s)

    def solve(self, tau1, tau2, energy, least=0.0002, most=2.0):
        a, b, n, m, s = self.system(tau1, tau2, energy)
        low = np.concatenate([np.full(3 * n, least), np.full(m + s, -0.3)])
        high = np.concatenate([np.full(3 * n, most), np.full(m + s, 0.3)])
        scale = np.full(3 * n, 0.02)
        for _ in range(4):
            extra = self.penalties(n, m, s, len(b), scale)
            q, r = np.linalg.qr(np.vstack([a, extra]))
            x = lsq_linear(r, q[:len(b)].T @ b, (low, high), method="bvls").x
            near = x[:3 * n].reshape(3, n)
            floor = np.median(near, axis=1, keepdims=True) * np.ones(n)
            scale = np.maximum(near, 0.3 * floor).ravel()
            low[:3 * n] = np.maximum(0.2 * floor.ravel(), least)
        cost = np.sum((a @ x - b) ** 2)
        return Solution(self, tau1, tau2, energy, x, n, m, cost, len(b))

    def search(self, tau1s, tau2s, energies, say=lambda text: None):
        best = None
        for energy in energies:
            for tau1 in tau1s:
                for tau2 in tau2s:
                    found = self.solve(tau1, tau2, energy)
                    say(f"tau {tau1} {tau2} s, {energy / 1000:.1f} kJ/mol: {found.rms_mV:.2f} mV")
                    if best is None or found.cost < best.cost:
                        best = found
        return best


class Solution:
    def __init__(self, problem, tau1, tau2, energy, x, n, m, cost, count):
        self.problem, self.tau1, self.tau2, self.energy = problem, tau1, tau2, energy
        self.r0, self.r1, self.r2 = x[:n], x[n:2 * n], x[2 * n:3 * n]
        self.move = x[3 * n:3 * n + m]
        self.shift = x[3 * n + m:]
        self.x, self.cost = x, cost
        self.rms_mV = 1000 * np.sqrt(cost / count)

    def ocv(self, z):
        """The curve at rest: what was given, moved, with the small current's polarisation back."""
        z = np.asarray(z, float)
        out = self.problem.ocv(z)
        if len(self.move):
            out = out + hats(self.problem.ocv_points, z) @ self.move
        return out + hats(self.problem.points, z) @ (
            self.r0 + self.r1 + self.r2) * self.problem.rest_current

    def residual(self, log, scale=1.0):
        """Measured minus model in volts, for a log of the fit or any other."""
        n3 = 3 * len(self.problem.points)
        rows = self.problem.rows(log, self.tau1, self.tau2, self.energy)
        under = np.tile(hats(self.problem.points, log.z) * self.problem.rest_current, 3)
        model = self.ocv(log.z) + scale * ((rows - under) @ self.x[:n3])
        return log.V - model
