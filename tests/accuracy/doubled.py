"""A load that doubles for good: two runs of the simulated pack behind each other, cut so that the
half of the run is 20 min after the change."""
import os
import subprocess

from logs import Log

BEFORE_S, AFTER_S = 9000, 1200
CAPACITY_AH, IDLE_W = 2.0, 1.0


def simulate(bench, path, charge, watts, *more):
    subprocess.run([bench, "sim", "--cells", "conf/cells/nmc-18650.ini", "--capacity",
                    f"{CAPACITY_AH} Ah", "--charge", f"{100 * charge:.3f} %", "--idle", f"{watts} W",
                    "--burst", f"{2 * watts} W", "--temperature", "15 C", "--seed", "11", "--to",
                    "stdout", "--speed", "0", "--truth", path, *more],
                   check=True, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)


def rows_of(path):
    with open(path) as f:
        lines = [line for line in f if not line.startswith("#")]
    names = lines[0].strip().split(",")
    return [dict(zip(names, map(float, line.split(",")))) for line in lines[1:]]


class Made(Log):
    def __init__(self, path, rows):
        self.name, self.path, self.rows, self.table = "doubled", path, rows, "conf/cells/nmc-18650.ini"
        self.capacity_Ah = CAPACITY_AH


def doubled_load(bench, folder):
    """The log, and the mean load before the change in watts."""
    first, second = os.path.join(folder, "first.csv"), os.path.join(folder, "second.csv")
    simulate(bench, first, 1.0, IDLE_W, "--for", f"{BEFORE_S} s")
    before = rows_of(first)
    simulate(bench, second, 1 - before[-1]["charge_Ah"] / CAPACITY_AH, 2 * IDLE_W)
    after = rows_of(second)
    change_s = before[-1]["time_s"] + 1
    for row in after:
        row["time_s"] += change_s
    end_s = next((r["time_s"] for r in after if r["voltage_V"] < 3.0), after[-1]["time_s"])
    rows = [r for r in before + after if r["time_s"] >= 2 * (change_s + AFTER_S) - end_s]
    path = os.path.join(folder, "doubled.csv")
    with open(path, "w") as f:
        f.write(",".join(rows[0]) + "\n")
        f.writelines(",".join(f"{v:.5f}" for v in r.values()) + "\n" for r in rows)
    load = [r["voltage_V"] * r["current_A"] for r in before if "current_A" in r]
    return Made(path, rows), sum(load) / len(load) if load else 1.15 * IDLE_W
