#!/usr/bin/env python3
"""What somebody without Brink would write: lookup.py PORT TABLE OUT looks voltages up in a curve."""
import bisect, re, sys

port, table, out = sys.argv[1:]
text = re.sub(r"\n[ \t]+", " ", open(table).read())  # long lists go on on indented lines
curve = text[text.index("[curve]"):]
charge, volt = ([float(x) for x in re.search(key + r" = ([\d. ]+)", curve)[1].split()]
                for key in ("charge", "voltage"))


def look_up(v):
    i = min(max(bisect.bisect(volt, v), 1), len(volt) - 1)
    return charge[i - 1] + (v - volt[i - 1]) / (volt[i] - volt[i - 1]) * (charge[i] - charge[i - 1])


for line in open(port):
    if found := re.search(r"\bv=([\d.]+)", line):
        with open(out, "w") as file:
            print(f"{look_up(float(found[1])):.0f} %", file=file)
