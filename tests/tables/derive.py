#!/usr/bin/python3
"""Derives the cell tables in conf/cells from measured logs and published curves.

derive.py [--check] [--search] [--judge] [NAME...]
    --check   write nothing; fail when a kept table differs from what is derived
    --search  try a grid of time constants and print the residuals
    --judge   print how the table does on logs it was not fitted to

The data lie in $BRINK_SHARED/data (default ../shared, /work/shared) and are not part of this
repository; without them the script says so and ends with 77. Needs Debian's python3-scipy.
"""

import argparse
import os
import sys
import textwrap

import numpy as np

import data
from circuit import Log, Problem, arrhenius
from text import TEXT

CELLS = os.path.join(os.path.dirname(os.path.abspath(__file__)), "../../conf/cells")
# Charge points of the curve and of the resistances, in percent: closer where things bend.
CURVE = [0, 0.5, 1, 2, 3, 4, 5, 6, 8, 10, 12.5, 15, 17.5, 20, 25, 30, 35, 40, 45, 50, 55, 60, 65, 70,
         75, 80, 85, 90, 95, 97.5, 100]
POINTS = np.array([0, 3, 6, 10, 14, 18, 24, 32, 42, 52, 62, 72, 84, 95]) / 100
# Where a curve taken under C/20 may be moved by what the rests of other logs say.
MOVE = np.array([0, 2, 4, 7, 10, 14, 18, 24, 32, 42, 52, 62, 72, 84, 100]) / 100


class Table:
    def __init__(self, name, capacity, ocv, points, r0, r1, r2, tau1, tau2, temp, energy):
        self.name, self.capacity, self.ocv = name, capacity, ocv
        self.points, self.r0, self.r1, self.r2 = points, r0, r1, r2
        self.tau1, self.tau2, self.temp, self.energy = tau1, tau2, temp, energy


def of_solution(name, capacity, found, energy, temp=25.0):
    return Table(name, capacity, found.ocv, found.problem.points, found.r0, found.r1, found.r2,
                 found.tau1, found.tau2, temp, energy)


# ---- what each cell is made from -----------------------------------------------------------------
NCA = "10.17632/wykht8y7tg.1"
NMC = "10.17632/cp3473x7xv.3"
M50 = "Pozzato"
LIPO = "10.5281/zenodo.7553043"
WARM = 28e3  # J/mol while the warm logs are fitted: only self-heating of a few kelvin depends on it


def log_of(source, capacity):
    return lambda words, **more: Log(data.find("", [source] + words), capacity, **more)


def energy_of(found, logs):
    """The activation energy under which the fitted resistances explain the cold logs best; each
    run's curve may shift where the log says so, for the cell ages and its curve moves with the
    cold."""
    def cost(energy):
        total = 0.0
        for log in logs:
            found.energy = energy
            rest = found.residual(log)
            for run in range(log.run[-1] + 1):
                use = (log.run == run) & (log.weight > 0)
                if use.any():
                    w = log.weight[use]
                    mean = np.average(rest[use], weights=w) if log.shift else 0.0
                    total += np.sum(w * (rest[use] - mean) ** 2)
        return total
    grid = np.arange(15e3, 45e3, 0.5e3)
    return float(grid[np.argmin([cost(e) for e in grid])])


def nca(search):
    q = 2.8881
    log = log_of(NCA, q)
    ocv = data.table("ocv_measured", ["Kollmeyer 2018"], "_25C_session.csv", "ocv_V")
    small = {"most": 3.2, "shift": True, "weight": 4.0}
    problem = Problem([log(["HPPC", "25degC"], **small), log(["UDDS"]),
                       log(["profile 1C", "fresh"])], ocv, POINTS)
    found = fit(problem, search, 10, 300)
    energy = energy_of(found, [log(["HPPC", "ambient 0degC"], **small),
                               log(["HPPC", "n10degC"], **small)])
    return of_solution("nca-18650", 2.888, found, energy), log, [
        ["LA92", "25degC"], ["Cycle_1", "25degC"], ["HPPC", "25degC"],
        ["HPPC", "ambient 0degC"], ["HPPC", "n10degC"], ["Cycle_1", "ambient 10degC"],
        ["Cycle_3", "ambient 0degC"],
        ["Cycle_1", "n10degC"], ["Cycle_1", "n20degC"]]


def nmc(search):
    q = 2.7807
    log = log_of(NMC, q)
    ocv = data.table("ocv_measured", ["Kollmeyer et al. 2020"], "_25C_C20.csv", "ocv_dis_V")
    # of the C/20 log the discharge and the hour of rest after it, not the charging branch
    problem = Problem([log(["LA92", "25degC"]), log(["profile 0.5C", "25degC"], weight=0.5),
                       log(["profile 1C", "25degC"]),
                       log(["C/20 dis", "25degC"], until_s=69400, weight=0.2)],
                      ocv, POINTS, rest_current=0.15, ocv_points=MOVE, ocv_pull=0.1)
    found = fit(problem, search, 10, 300)
    energy = energy_of(found, [log(["short drive segment"]), log(["profile 0.5C", "ambient 0degC"]),
                               log(["profile 0.5C", "n10degC"])])
    return of_solution("nmc-18650", 2.781, found, energy), log, [
        ["profile 0.5C", "25degC"], ["profile 0.5C", "ambient 0degC"], ["profile 0.5C", "n10degC"],
        ["short drive segment"], ["Mixed1", "25degC"], ["Mixed1", "ambient 10degC"],
        ["Mixed1", "ambient 0degC"],
        ["Mixed1", "n10degC"], ["Mixed1", "n20degC"]]


def nmc811(search):
    q = 4.877
    def log(words, **more):
        return Log(data.find("", [M50] + words), q, temp=23.0, **more)
    ocv = data.table("ocv_measured", [M50], "_C20.csv", "ocv_dis_V")
    problem = Problem([log(["HPPC"], thin=2)], ocv, POINTS, rest_current=0.2425, ocv_points=MOVE,
                      ocv_pull=0.1)
    found = fit(problem, search, 20, 300)
    return of_solution("nmc811-21700", q, found, WARM), log, [["UDDS"], ["profile C/20"]]


def lipo(search):
    q = 5.8
    log = log_of(LIPO, q)
    ocv = data.table("ocv_model", ["Ai2020"], "Ai2020.csv", "ocv_V")
    points = np.array([2, 5, 10, 15, 20, 30, 40, 50, 60, 70, 80, 90]) / 100
    move = np.array([0, 2, 4, 6, 8, 10, 14, 18, 24, 30, 40, 50, 60, 70, 80, 86, 100]) / 100
    problem = Problem([log(["profile 1C"], skip_s=120), log(["profile 2C"], skip_s=120)], ocv,
                      points, ocv_points=move, ocv_pull=0.01)
    found = fit(problem, search, 10, 600)
    return of_solution("lipo-pouch", q, found, WARM), log, [["profile 1C"], ["profile 2C"]]


def lfp(search):
    q = 1.2
    log = log_of("terencetao", q)
    z, v = data.table("ocv_measured", ["Tao"], "_hysteresis.csv", "ocv_avg_V")
    move = np.arange(15, 90, 5) / 100
    problem = Problem([log(["long flat-zone"], thin=3)], (z, rising(v)),
                      np.arange(20, 90, 10) / 100, ocv_points=move, ocv_pull=0.5)
    found = fit(problem, search, 20, 600)
    found.move[:] = 0.0  # the rested branches are the better witness
    return of_solution("lfp", q, found, WARM), log, [["long flat-zone"]]


def on_window(curve, low_V, high_V):
    """The curve with charge 0 at low_V and 1 at high_V."""
    z = np.linspace(-0.05, 1.05, 4401)
    v = curve(z)
    z0, z1 = np.interp([low_V, high_V], v, z)
    return lambda x: curve(z0 + np.asarray(x, float) * (z1 - z0)), z1 - z0


def generic(search):
    """The mean of what is known of cells of the 4.2 V kind, between 3.00 and 4.20 V at rest."""
    del search
    made = [recipe(False)[0] for recipe in (nca, nmc, nmc811, lipo)]
    curves = [on_window(t.ocv, 3.0, 4.2)[0] for t in made]
    for name in ("Ecker2015", "Mohtat2020", "NCA_Kim2011"):
        z, v = data.table("ocv_model", [name], name + ".csv", "ocv_V")
        curves.append(on_window(lambda x, z=z, v=v: np.interp(x, z, v), 3.0, 4.2)[0])
    z = np.array(CURVE) / 100
    volts = np.array([curve(z) for curve in curves])
    wide = np.linspace(0.2, 1.0, 81)
    spread = np.array([curve(wide) for curve in curves]).std(axis=0, ddof=1)
    print("generic-li-ion: spread of the curves "
          f"{1000 * np.sqrt(np.mean(spread ** 2)):.0f} mV rms above 20 %, "
          f"{1000 * spread.max():.0f} mV most")
    mean = volts.mean(axis=0)
    points = np.array([0, 5, 10, 20, 30, 40, 50, 60, 70, 80, 90]) / 100
    def ohm(pick):  # geometric mean of resistance times capacity, for a cell of 2.5 Ah
        parts = [np.interp(points, t.points, pick(t)) * t.capacity for t in made]
        return np.exp(np.mean(np.log(parts), axis=0)) / 2.5
    return Table("generic-li-ion", 2.5, lambda x: np.interp(x, z, mean), points,
                 ohm(lambda t: t.r0), ohm(lambda t: t.r1), ohm(lambda t: t.r2), 12, 350, 25.0,
                 WARM), None, []


RECIPES = {"nca-18650": nca, "nmc-18650": nmc, "nmc811-21700": nmc811, "lipo-pouch": lipo,
           "lfp": lfp, "generic-li-ion": generic}


def fit(problem, search, tau1, tau2):
    if search:
        problem.search([5, 10, 20, 30], [150, 300, 600, 1200], [WARM], print)
    found = problem.solve(tau1, tau2, WARM)
    print(f"tau {tau1} s and {tau2} s: residual {found.rms_mV:.1f} mV over the rows of the fit")
    return found


# ---- writing -------------------------------------------------------------------------------------
def laid(key, words):
    """A key whose value goes on on indented lines."""
    lines, line = [], f"{key} ="
    for word in words:
        if len(line) + 1 + len(word) > 96:
            lines.append(line)
            line = "   "
        line += " " + word
    return "\n".join(lines + [line])


def listing(key, numbers, form, unit):
    return laid(key, [form % x for x in numbers] + [unit])


def rising(values):
    return np.maximum.accumulate(values)


def file_of(table):
    text = TEXT[table.name]
    volts = rising(np.round(table.ocv(np.array(CURVE) / 100), 4))
    parts = [textwrap.fill(" ".join(part.split()), 98, initial_indent="# ",
                           subsequent_indent="# ") for part in text["about"].split("\n\n")]
    head = "\n#\n".join(parts)
    fields = [("name", table.name), ("chemistry", text["chemistry"]),
              ("capacity", f"{table.capacity:.4g} Ah")]
    fields += [(key, text[key]) for key in
               ("full", "damage", "possible_low", "possible_high", "spread", "source", "licence")]
    return "\n".join([
        head, "", "[cell]", *[laid(key, value.split()) for key, value in fields], "", "[curve]",
        listing("charge", CURVE, "%g", "%"), listing("voltage", volts, "%.4f", "V"), "",
        "[resistance]", listing("charge", 100 * table.points, "%g", "%"),
        listing("r0", 1000 * table.r0, "%.2f", "mohm"),
        listing("r1", 1000 * table.r1, "%.2f", "mohm"),
        listing("r2", 1000 * table.r2, "%.2f", "mohm"), f"tau1 = {table.tau1:g} s",
        f"tau2 = {table.tau2:g} s", f"temperature = {table.temp:g} C",
        f"activation = {table.energy / 1000:g} kJ/mol", ""])


def model(table, log):
    """The table's terminal voltage for a log."""
    factor = arrhenius(table.energy, log.temp) / arrhenius(table.energy, np.array(table.temp))
    load = (factor * log.I)[:, None]
    at = [np.interp(log.z, table.points, r)[:, None] for r in (table.r0, table.r1, table.r2)]
    return (table.ocv(log.z) - (at[0] * load)[:, 0] -
            log.lowpass(at[1] * load, table.tau1)[:, 0] -
            log.lowpass(at[2] * load, table.tau2)[:, 0])


def judge(table, log, names):
    for words in names:
        one = log(words)
        off = 1000 * (one.V - model(table, one))
        tenth = [off[(one.z >= k / 10) & (one.z < (k + 1) / 10)] for k in range(10)]
        print(f"  {' '.join(words)}: mean {off.mean():+.0f} mV, rms {np.sqrt((off ** 2).mean()):.0f}"
              " mV; by tenth of charge " +
              " ".join(f"{part.mean():+.0f}" if len(part) else "-" for part in tenth))


def main():
    args = argparse.ArgumentParser()
    for flag in ("--check", "--search", "--judge"):
        args.add_argument(flag, action="store_true")
    args.add_argument("name", nargs="*")
    args = args.parse_args()
    wrong = 0
    for name in args.name or RECIPES:
        print(f"{name}:")
        table, log, names = RECIPES[name](args.search)
        if args.judge:
            judge(table, log, names)
        text, path = file_of(table), os.path.join(CELLS, name + ".ini")
        if not args.check:
            with open(path, "w", encoding="ascii") as file:
                file.write(text)
        elif open(path, encoding="ascii").read() != text:
            print(f"{path} is not what the data give; make it again with tests/tables/derive.py")
            wrong = 1
    return wrong


if __name__ == "__main__":
    sys.exit(main())
