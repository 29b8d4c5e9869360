"""Writes or checks ocv_vectors.h: what SciPy's PchipInterpolator says on the tables of test_ocv.

make_ocv.py FILE          write FILE
make_ocv.py --check FILE  make the vectors anew and compare them with FILE, number by number
"""

import re
import sys

import numpy as np
from scipy.interpolate import PchipInterpolator
from scipy.optimize import brentq

HEAD = """/* Made by tests/unit/vectors/make_ocv.py; `make vectors` makes it again and compares.
 *
 * Values, slopes and inverses of SciPy's PchipInterpolator on the tables of test_ocv; the inverse
 * is its value solved by Brent's method (scipy.optimize.brentq). */
#pragma once

#include <stddef.h>

struct ocv_vector {
    const char *name;
    size_t n;
    const double *charge, *voltage_V, *slope_V; /* the table, and its slopes */
    size_t n_at;
    const double *at, *at_V, *at_slope_V;
    size_t n_back;
    const double *back_V, *back;
};
"""

# Linux kernel, drivers/power/supply/samsung-sdi-battery.c: a 1500 mAh cell of the 4.18 V kind, 25 C
# (percent, mV); REFERENCES.md 3.2.
KERNEL = [(0, 3300), (1, 3352), (2, 3405), (4, 3497), (7, 3593), (10, 3662), (15, 3685), (20, 3711),
          (25, 3743), (30, 3764), (40, 3778), (50, 3798), (55, 3816), (59, 3839), (65, 3891),
          (70, 3920), (77, 3962), (85, 4013), (89, 4057), (95, 4105), (100, 4178)]
# The same file's table of another cell has 3684 mV at both 13 and 12 %.
STEP = sorted(KERNEL + [(12, 3684), (13, 3684)])
# F. N. Fritsch and R. E. Carlson, SIAM J. Numer. Anal. 17 (1980) 238-246, data set RPN 14.
RPN14 = ([7.99, 8.09, 8.19, 8.7, 9.2, 10, 12, 15, 20],
         [0, 2.76429e-5, 4.37498e-2, 0.169183, 0.469428, 0.943740, 0.998636, 0.999919, 0.999994])


def table(pairs):
    return [p / 100 for p, _ in pairs], [mv / 1000 for _, mv in pairs]


def closed_form(n):
    """M. Chen and G. A. Rincon-Mora, IEEE Trans. Energy Convers. 21 (2006) 504-511, eq. 2."""
    z = np.linspace(0, 1, n) ** 1.5
    return z, -1.031 * np.exp(-35 * z) + 3.685 + 0.2156 * z - 0.1178 * z ** 2 + 0.3201 * z ** 3


CASES = [("li-ion, 21 points", table(KERNEL)), ("128 points", closed_form(128)),
         ("two points", ([0, 1], [3.0, 4.2])), ("three points", ([0, 0.1, 1], [3.0, 3.6, 4.2])),
         ("three points, end slope held", ([0, 0.5, 1], [3.0, 3.0, 4.2])),
         ("flat step", table(STEP)), ("RPN 14", RPN14), ("plateau", ([0, 1, 2, 3], [0, 1, 1, 2]))]


def array(name, values):
    words, lines, line = ["%.15g" % v for v in values], [], "   "
    for word in words:
        if len(line) + len(word) + 2 > 100:
            lines.append(line)
            line = "   "
        line += " " + word + ","
    return "static const double %s[] = {\n%s\n};\n" % (name, "\n".join(lines + [line]))


def vectors(index, name, nodes, random):
    x, y = (np.array(v, float) for v in nodes)
    curve = PchipInterpolator(x, y)
    slope = curve.derivative()
    at = np.sort(np.concatenate([random.uniform(x[0], x[-1], 40), 0.5 * (x[1:] + x[:-1])[:20]]))
    # Near a flat place the inverse is no number to compare: keep to where the curve rises.
    steep = slope(at) > 1e-3 * (y[-1] - y[0]) / (x[-1] - x[0])
    back = curve(at[steep])
    inverse = [brentq(lambda z, v=v: curve(z) - v, x[0], x[-1], xtol=1e-15, rtol=1e-15) for v in back]
    parts = [("charge", x), ("voltage", y), ("slope", slope(x)), ("at", at), ("at_V", curve(at)),
             ("at_slope", slope(at)), ("back_V", back), ("back", inverse)]
    text = "".join(array("v%d_%s" % (index, key), value) for key, value in parts)
    row = ('    {"%s", %d, v%d_charge, v%d_voltage, v%d_slope, %d, v%d_at, v%d_at_V, v%d_at_slope,'
           '\n     %d, v%d_back_V, v%d_back},\n' % (
               (name, len(x)) + (index,) * 3 + (len(at),) + (index,) * 3 + (len(back),)
               + (index,) * 2))
    return text, row


def made():
    random = np.random.default_rng(14)
    parts = [vectors(i, name, nodes, random) for i, (name, nodes) in enumerate(CASES)]
    return (HEAD + "\n/* clang-format off */\n" + "".join(text for text, _ in parts)
            + "static const struct ocv_vector OCV_VECTORS[] = {\n" + "".join(row for _, row in parts)
            + "};\n/* clang-format on */\n")


def pieces(text):
    """Numbers and what stands between them."""
    number = r"(?<![\w.])-?\d+\.?\d*(?:e[-+]?\d+)?(?![\w.])"
    return [float(x) for x in re.findall(number, text)], re.sub(number, "#", text)


def check(path):
    with open(path, encoding="ascii") as file:
        kept, frame = pieces(file.read())
    new, new_frame = pieces(made())
    # Line breaks move with the length of numbers; beyond 1e-12 something has changed.
    same = frame.split() == new_frame.split() and np.allclose(kept, new, rtol=1e-12, atol=1e-12)
    if not same:
        sys.exit(f"{path} is not what SciPy gives; see the difference, then make it again with\n"
                 f"  /usr/bin/python3 tests/unit/vectors/make_ocv.py {path}")
    print(f"vectors: {len(kept)} numbers of {path} are what SciPy gives")


if __name__ == "__main__":
    if sys.argv[1] == "--check":
        check(sys.argv[2])
    else:
        with open(sys.argv[1], "w", encoding="ascii") as out:
            out.write(made())
