"""What each table's file says beside its numbers. Figures in the prose come from `derive.py --judge`
and `--search`; a limit's mark says whether its source was read or is from memory."""

LI = {"chemistry": "li-ion", "full": "4.20 V", "possible_low": "1.50 V", "possible_high": "4.40 V"}

LIMITS = """
full and damage: specifications of cells of this kind, read: 4.20 +- 0.05 V and 2.50 V. Between
3.00 V and that lie about 3 % of the charge; a floor of 3.00 V costs little and spares the cell.
"""

TEXT = {
    "nca-18650": LI | {
        "damage": "2.50 V", "spread": "15 mV",
        "source": "P. Kollmeyer 2018, Mendeley Data V1, doi:10.17632/wykht8y7tg.1",
        "licence": "CC BY 4.0",
        "about": """
A cylindrical 18650 cell, NCA against graphite, 2.9 Ah on its label; made from one new cell.

Curve: the shape of a C/20 discharge, its charge axis laid on the rested points of a pulse test of
the same weeks at 25 C. 0 % is 2.5 V at rest, 100 % is full at 4.2 V; between them 2.888 Ah.

Resistances: least squares over pulses of C/2 and 1C, one driving log (UDDS, C/7 in the mean) and
one 1C discharge, all at 25 C. Activation energy: pulses at 0 and -10 C.

How well it fits, terminal voltage of logs that were not fitted, rms: 14 and 15 mV at 25 C (LA92 and
a mixed cycle, bursts up to 6C); 24 mV at 10 C, 50 mV at 0 C, 63 mV at -10 C, 104 mV at -20 C (mixed
cycles), in the mean within 13 mV everywhere. In the cold a small current meets up to 40 % more
resistance than a large one (C/2 against 2C at -20 C), which one activation energy cannot tell.

spread: rested points of the same cell lay 6 mV off at 25 C, 16 mV at 10 C and 26 mV at 0 C, all
of the latter too low, a part of it ageing. What it cannot tell: an aged cell. After 110 cycles the
same cell held a sixth less.
""" + LIMITS},
    "nmc-18650": LI | {
        "damage": "2.50 V", "spread": "25 mV",
        "source": "P. Kollmeyer, C. Vidal, M. Naguib, M. Skells 2020, Mendeley Data, "
                  "doi:10.17632/cp3473x7xv.3",
        "licence": "CC BY 4.0",
        "about": """
A cylindrical 18650 cell, NMC against graphite, 3.0 Ah on its label; made from one new cell.

Curve: the C/20 discharge at 25 C, its own sag added back, moved by what rests say: 50 mV up under
3 %, no more than 13 mV elsewhere. 0 % is where 2.8 V were met at C/20, 2.9 V after an hour; 100 %
is full at 4.2 V. 2.781 Ah lie between, less than on the label.

Resistances: least squares over one driving log (LA92), a C/20, a C/2 and a 1C discharge, all at
25 C.
Activation energy: C/2 discharges at 0 and -10 C and a driving log with rests at 0 C.

How well it fits, terminal voltage of a mixed cycle that was not fitted, rms: 14 mV at 25 C, 43 mV at
10 C, 67 mV at 0 C, 111 mV at -10 C. At 0 C and under 20 % of charge a C/2 discharge sags 0.16 V
deeper than the table has it: in the cold the last fifth is not to be relied on.

spread: the C/20 curves at 0 and 10 C lie 27 mV rms from the one at 25 C, part of it sag.
""" + LIMITS},
    "nmc811-21700": LI | {
        "damage": "2.50 V", "spread": "30 mV",
        "source": "G. Pozzato, A. Allam, S. Onori 2022, Data in Brief 41, 107995, "
                  "doi:10.1016/j.dib.2022.107995",
        "licence": "CC BY 4.0",
        "about": """
A cylindrical 21700 cell, nickel-rich NMC against graphite with silicon oxide, 5 Ah on its label;
made from one new cell.

Curve: the C/20 discharge at 23 C, its own sag added back, moved by what rests of an hour say: 41 mV
up at 10 %, no more than 10 mV elsewhere. 0 % is where 2.5 V were met at C/20; under 10 % there was
no rest, so that end is a little too low.

Resistances: least squares over one pulse test at 23 C (steps of 1C, rests of an hour).

Activation energy: not measured on this cell, the one found for the two 18650 cells.

How well it fits, terminal voltage of a driving log that was not fitted (UDDS, 23 C): 6 mV rms.

What it cannot tell: temperatures away from 23 C were not measured at all.

spread: not measured on a second cell. Rests of an hour lay within 8 mV of the curve; the published
model of another cell of the kind lies 20 to 60 mV higher above 20 %. The figure stands between.
""" + LIMITS},
    "lipo-pouch": LI | {
        "damage": "3.00 V", "spread": "30 mV",
        "source": "Sapra et al., SAE 2023-01-0522, doi:10.5281/zenodo.7553043, and for the end "
                  "of the curve W. Ai et al. 2020, doi:10.1149/2.0122001JES",
        "licence": "Apache-2.0, and for the end of the curve BSD-3-Clause",
        "about": """
A lithium polymer pouch, cobalt oxide against graphite, for model craft, 5.45 Ah on its label.

Made without a single rested point: the curve is what charging and discharging at 1C and 2C between
3.01 and 4.10 V agree on when the current is thought away. Above 86 %, where there are no data, it
follows a published model of a like pouch up to 4.20 V. 100 % are 5.80 Ah, its authors' scale.

Resistances: from the same two logs, 22 to 35 C, which is 6 mV rms off at 1C and 9 mV at 2C.
Activation energy: the one found for the two 18650 cells.

What it cannot tell: hysteresis and slow rest, which were not measured, and the cold.

spread: no figure in the data; the published model of another pouch lies 40 to 80 mV lower. 30 mV
are an estimate for packs of the same make, not a measurement.

full: common to the kind, read. damage: 3.00 V, the end of the authors' window and the cut-off that
makers of such packs name (common practice); a swollen pouch is a fire hazard.
"""},
    "lfp": {
        "chemistry": "lifepo4", "full": "3.65 V", "damage": "2.50 V", "possible_low": "1.00 V",
        "possible_high": "3.90 V", "spread": "25 mV",
        "source": "Shi, Tao et al. 2025, state of charge of LFP cells with hysteresis, data set",
        "licence": "MIT",
        "about": """
A lithium iron phosphate cell of 1.2 Ah against graphite.

Curve: the mean of its slow charging and discharging branches at 25 C, 0 % at 2.0 V and 100 % at
3.65 V under current. Resistances: least squares over 25 hours of changing load, 20 to 80 % of
charge, 25 C; outside they are held. Activation energy: the one found for the two 18650 cells.

What it cannot tell, and nobody can from voltage: the charge on the plateau. From 30 to 90 % the
curve rises by 64 mV, its branches lie 33 to 58 mV apart, and one millivolt is one percent and more
of charge. Expect bounds tens of percent wide until the pack has been full or near empty, and set
`cutoff_rest` and `floor`, which stand on the steep end. A gauge with a current channel is the
remedy.

spread: half the distance of the branches (21 mV rms from 10 to 95 %), and some for other cells.

full 3.60 to 3.65 V: read. damage: 2.00 to 2.50 V by the kind of cell, read; the upper one.
"""},
    "generic-li-ion": LI | {
        "damage": "3.00 V", "spread": "60 mV",
        "source": "mean of nca-18650, nmc-18650, nmc811-21700, lipo-pouch and of published curves: "
                  "M. Ecker et al. 2015 (doi:10.1149/2.0551509jes), P. Mohtat et al. 2020 "
                  "(doi:10.1149/1945-7111/aba5d1), G.-H. Kim et al. 2011 (doi:10.1149/1.3597614)",
        "licence": "CC BY 4.0, Apache-2.0 and BSD-3-Clause by parts, as the sources",
        "about": """
Any lithium cell of the 4.2 V kind ("3.7 V") of which no more is known. Not for cells marked 3.2 V,
3.3 V (take lfp) or charged to more than 4.25 V.

Curve: the mean of seven curves, each laid between 3.00 and 4.20 V at rest. Resistances: mean of the
four measured tables for the same capacity.

What it cannot tell: much. The seven curves lie 60 mV rms apart above 20 % of charge, 120 mV most,
cobalt oxide pouches above and NCA below; in the flat middle that is ten percent of charge. So the
bounds Brink shows with this table are wide, and rightly. A table of the kind, or one made for the
pack (brink-cells(5)), is worth the trouble.

full: read. damage: 3.00 V, the highest among the kinds it stands for.
The identifiers of the three models are from memory.
"""},
}
