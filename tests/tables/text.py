"""What each table's file says beside its numbers."""

LI = {"chemistry": "li-ion", "full": "4.20 V", "possible_high": "4.40 V"}

TEXT = {
    "nca-18650": LI | {
        "damage": "2.50 V", "possible_low": "1.50 V", "spread": "12 mV",
        "source": "P. Kollmeyer 2018, Mendeley Data V1, doi:10.17632/wykht8y7tg.1",
        "licence": "CC BY 4.0",
        "about": """
A cylindrical 18650 cell, NCA against graphite, 2.9 Ah; one fresh cell.

Curve: shape of a C/20 discharge laid on the rested points of the pulse test at 25 C, so that it
is the voltage at rest. 0 % is 2.5 V, 100 % is full at 4.2 V.
Resistances: least squares over pulses of C/2 and 1C, one driving log (LA92) and one 1C discharge,
all at 25 C. Activation energy: pulses at 0 and -10 C.
damage: the least voltage the data's authors and the specification of a like cell allow.
"""},
    "nmc-18650": LI | {
        "damage": "2.50 V", "possible_low": "1.50 V", "spread": "15 mV",
        "source": "P. Kollmeyer, C. Vidal, M. Naguib, M. Skells 2020, Mendeley Data, "
                  "doi:10.17632/cp3473x7xv.3",
        "licence": "CC BY 4.0",
        "about": """
A cylindrical 18650 cell, NMC against graphite, 3.0 Ah on its label; one cell.

Curve: the C/20 discharge at 25 C with its own sag added back. 0 % is 2.8 V, so 100 % are 2.78 Ah.
Resistances: least squares over one driving log (LA92), a C/2 and a 1C discharge, all at 25 C.
Activation energy: C/2 discharges at 0 and -10 C and a driving log with rests at 0 C.
"""},
    "nmc811-21700": LI | {
        "damage": "2.50 V", "possible_low": "1.50 V", "spread": "15 mV",
        "source": "G. Pozzato, A. Allam, S. Onori 2022, Data in Brief 41, 107995, "
                  "doi:10.1016/j.dib.2022.107995",
        "licence": "CC BY 4.0",
        "about": """
A cylindrical 21700 cell, nickel-rich NMC against graphite with silicon oxide, 5 Ah; one cell.

Curve: the C/20 discharge at 23 C with its own sag added back. 0 % is 2.5 V.
Resistances: least squares over a pulse test at 23 C. Activation energy: not measured on this
cell; as found for the two 18650 cells.
"""},
    "lipo-pouch": LI | {
        "damage": "3.00 V", "possible_low": "1.80 V", "spread": "25 mV",
        "source": "Sapra et al., SAE 2023-01-0522, doi:10.5281/zenodo.7553043, and for its end "
                  "W. Ai et al. 2020, doi:10.1149/2.0122001JES",
        "licence": "Apache-2.0, its end BSD-3-Clause",
        "about": """
A lithium polymer pouch of the cobalt oxide kind, sold for model craft, 5.45 Ah on its label.

Made without a single rested point: the curve is what charging and discharging at 1C and 2C agree
on between 3.01 and 4.10 V, its end above 86 % follows a published model of another pouch.
100 % are 5.80 Ah, its authors' scale. Hence the wide spread.
Resistances hold for 23 to 35 C; the activation energy is taken from other cells.
"""},
    "generic-li-ion": LI | {
        "damage": "3.00 V", "possible_low": "1.50 V", "spread": "60 mV",
        "source": "mean of nca-18650, nmc-18650, nmc811-21700, lipo-pouch and published curves: "
                  "Ecker 2015, Mohtat 2020, Kim 2011",
        "licence": "CC BY 4.0, Apache-2.0, BSD-3-Clause",
        "about": """
Any lithium cell of the 4.2 V kind of which no more is known.

Curve: the mean of seven curves laid between 3.00 and 4.20 V at rest. A cell of your pack will lie
tens of millivolts off, which in the flat middle is ten percent of charge and more: the bounds
Brink shows with this table are wide, and they are right. A table of the right kind of cell, or
one made for the pack, is worth the trouble.
"""},
}
