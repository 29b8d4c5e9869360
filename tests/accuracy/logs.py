"""The measured logs that judge, and what was done to make more of them."""
import csv
import os
import random
import subprocess

CELLS = {"pan": ("panasonic_ncr18650pf", "nca-18650"), "lg": ("lg_18650hg2", "nmc-18650"),
         "m50t": ("lg_m50t", "nmc811-21700"), "spm": ("spm", "spm"),
         "lipo": ("lipo_5450_pouch", "lipo-pouch"), "lfp12": ("lfp_1p2ah", "lfp")}

SPM_AH = 5.09

# Not among them, because conf/cells was fitted to them: the C/20 and pulse logs, pan_25C_UDDS,
# pan_25C_1C_start_2, lg_25C_LA92, lg_0C_PauseCycle. The simulated cell's table is fitted here, to its
# slow discharge and its pulses.
WARM = ["pan_25C_Cycle_1", "pan_25C_LA92", "lg_25C_Mixed1", "lg_25C_CC_0p5C", "lg_25C_CC_1C_551"]
COOL = ["pan_10C_Cycle_1", "lg_10C_Mixed1"]
COLD = ["pan_0C_Cycle_3", "lg_0C_Mixed1", "lg_0C_CC_0p5C"]
FROST = ["pan_n10C_Cycle_1", "lg_n10C_Mixed1", "lg_n10C_CC_0p5C"]
DEEP = ["pan_n20C_Cycle_1", "lg_n20C_Mixed1"]
AGED = ["pan_25C_1C_end_1"]
OTHERS = ["m50t_23C_UDDS", "spm_fen_logger_25C", "lipo_1C_cycle01", "lipo_2C_cycle01",
          "lfp12_25C_flatzone_part1"]
STEADY = ["spm_fen_logger_25C", "lg_25C_CC_0p5C", "lg_25C_CC_1C_551"]
BURSTY = ["pan_0C_Cycle_3", "lg_0C_Mixed1", "pan_n10C_Cycle_1", "lg_n10C_Mixed1"]


def fit_spm(bench, data, folder):
    path = os.path.join(folder, "spm.ini")
    subprocess.run([bench, "fit", "--ocv", f"{data}/spm/spm_c50_25C.csv", "--pulse",
                    f"{data}/spm/spm_pulse_25C.csv", "--pulse", f"{data}/spm/spm_pulse_0C.csv",
                    "--capacity", f"{SPM_AH} Ah", "--name", "spm", "-o", path],
                   check=True, stdout=subprocess.DEVNULL)
    return path


class Log:
    def __init__(self, data, name):
        folder, table = CELLS[name.split("_")[0]]
        self.table = f"conf/cells/{table}.ini"
        self.name, self.path = name, f"{data}/{folder}/{name}.csv"
        with open(self.path) as f:
            lines = f.readlines()
        self.head = [line for line in lines if line.startswith("#")]
        self.rows = [{k: float(v) for k, v in row.items()}
                     for row in csv.DictReader(line for line in lines if not line.startswith("#"))]
        hint = next((line for line in self.head if "capacity_Ah" in line), "")
        self.capacity_Ah = float(hint.split("capacity_Ah")[1].split(";")[0]) if hint else SPM_AH
        self.start = min(1.0, 1 - self.rows[0]["charge_Ah"] / self.capacity_Ah)

    def mean_W(self):
        """While discharging: what a careful person would have typed, before being 30 % wrong."""
        power = [row["voltage_V"] * row["current_A"] for row in self.rows if row["current_A"] > 0]
        return sum(power) / len(power)

    def altered(self, folder, name, change):
        """Another log, with change(row) for each row."""
        path = os.path.join(folder, f"{self.name}.{name}.csv")
        with open(path, "w") as f:
            f.writelines(self.head)
            out = csv.DictWriter(f, self.rows[0].keys())
            out.writeheader()
            for row in self.rows:
                out.writerow(change(dict(row)))
        return path


def poor_adc(seed):
    """10 bits over 5 V behind 4 mV of noise."""
    draw, step_V = random.Random(seed), 5 / 1024

    def change(row):
        row["voltage_V"] = round(step_V * round((row["voltage_V"] + draw.gauss(0, 0.004)) / step_V), 5)
        return row
    return change


def gain(share):
    def change(row):
        row["voltage_V"] = round(row["voltage_V"] * (1 + share), 5)
        return row
    return change
