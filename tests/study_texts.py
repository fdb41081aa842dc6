"""Study files for the tests of reading: one that is right, and one full of mistakes."""

GOOD = """\
title = "Push-pull half, on the bench"
scenario = "One half of a lamp driver"
expected_frequency = ["6 MHz", "8 MHz"]
leak = "10 nS"

[run]
units = 200
seed = 7
rank = ["start_margin", "Q1.drain_peak"]

[rails.vdd]
net = "vdd"
voltage = "24 V"
resistance = "50 mohm"

[rails.bias]
net = "vb"
voltage = "4.2 V"

[parts.L1]
kind = "inductor"
nets = ["vdd", "a"]
inductance = "18 uH"
resistance = "60 mohm"
saturation = [["2 A", "95 %"], ["4 A", "60 %"]]

[parts.L2]
kind = "inductor"
nets = ["a", "p"]
coil = {turns = 6, diameter = "40 mm", length = "30 mm"}
q = 200
q_frequency = "7 MHz"

[parts.C1]
kind = "capacitor"
nets = ["a", "gnd"]
capacitance = "1 nF"
pieces = 3
spread = "c-5"
rating = {voltage = "500 V", current = "3 A"}

[parts.C2]
kind = "capacitor"
nets = ["p", "ga"]
capacitance = "75 pF"
rating = {voltage = "1 kV"}

[parts.C3]
kind = "capacitor"
nets = ["ga", "gnd"]
capacitance = "1.6 nF"
rating = {voltage = "100 V"}

[parts.R1]
kind = "resistor"
nets = ["vb", "ga"]
resistance = "3.3 kohm"

[parts.Q1]
kind = "mosfet"
drain = "a"
gate = "ga"
rating = {drain_voltage = "200 V"}

[parts.Q1.sheet]
threshold = {minimum = "2 V", typical = "3 V", maximum = "4 V", current = "250 uA"}
transfer = {current = "10 A", gate_voltage = "5 V"}
capacitance = {ciss = "1.7 nF", coss = "300 pF", crss = "60 pF", drain_voltage = "25 V"}

[parts.LAMP]
kind = "load"
coil = "L2"
coupling = 0.3
inductance = "300 nH"
resistance = "8 ohm"

[states.dark]
starts_here = true
values = {"LAMP.coupling" = 0.05, "LAMP.resistance" = "100 ohm", "vdd.voltage" = "23 V"}

[states.full]

[conditions.room]

[conditions.hot]
ambient = {law = "uniform", low = "30 degC", high = "60 degC"}
supply = "10 %"
age = "1000 h"

[[limits]]
figure = "start_margin"
at_least = "3 dB"
rule = "house rule"

[[limits]]
figure = "voltage_peak"
parts = ["C1", "C2", "C3"]
share_of_rating = 0.7
rule = "derating"
"""

TABLES = {"c-5": ("capacitor",), "l-5": ("inductor",)}

BAD = """\
titel = "Push-pull half"
expected_frequency = ["8 MHz", "6 MHz"]

[run]
units = 0
rank = ["start_margn", "drain_peak", "Q7.drain_peak"]

[rails.vdd]
net = "vdd"
voltage = "-24 V"

[rails.bias]
net = "vdd"
voltage = "4.2 V"

[parts.L1]
kind = "inductor"
nets = ["vdd", "a"]
inductance = "18 uH"
coil = {turns = 6, diameter = "40 mm", length = "30 mm"}
resistance = "2,2 ohm"
spread = "c-5"

[parts.C1]
kind = "capacitor"
nets = ["a", "gnd"]
capacitance = "5.6 F"
spread = "c5"
rating = {drain_voltage = "1 kV"}

[parts.C2]
kind = "capacitor"
nets = ["a", "ga", "gb"]
capacitance = 75

[parts.C3]
kind = "capaciter"

[parts.R1]
kind = "resistor"
nets = ["vb", "vb"]
resistance = "3.3 kF"

[parts.Q1]
kind = "mosfet"
drain = "a"
gate = "ga"

[parts.Q1.sheet]
threshold = {minimum = "5 V", typical = "3 V", current = "250 uA"}
capacitance = {ciss = "17 pF", coss = "300 pF", crss = "60 pF", drain_voltage = "25 V"}

[parts.V1]
kind = "drive"
nets = ["ga", "gnd"]
high = "5 V"
resistance = "1 ohm"

[parts.K1]
kind = "coupling"
inductors = ["L1", "L3"]
coupling = 1.2

[states.dark]
values = {"Q1.treshold" = "3 V", "R9.resistance" = "100 ohm", "R1.resistance" = "3 V"}

[conditions.hot]
ambient = {law = "unifrm", low = "30 degC", high = "60 degC"}
age = 1000

[[limits]]
figure = "start_margin"
at_least = 3
rule = "house rule"

[[limits]]
figure = "voltage_peak"
share_of_rating = 0.7
parts = ["C1", "Q9"]
states = ["drak"]
rule = "derating"

[[limits]]
figure = "drain_peek"
rule = "derating"
"""

# The whole answer to BAD, word for word.
# ruff: noqa: E501 - messages are as long as they are
TOLD = """\
38 mistakes:
- bad.toml title: expected a text in quotes, got nothing. Add it.
- bad.toml expected_frequency: expected the lower frequency first, got ["8 MHz", "6 MHz"].
- bad.toml titel: expected only keys known here, got titel = "Push-pull half". Did you mean title?
- bad.toml [run] units: expected a whole number at least 1 and at most 10000000, got 0.
- bad.toml [run] rank: expected a figure, got "start_margn". Did you mean start_margin?
- bad.toml [run] rank: expected a part and its figure, got "drain_peak". Write "Q1.drain_peak".
- bad.toml [run] rank: expected a part or rail of this study, got "Q7". Known here: L1, C1, C2, C3, R1, Q1, V1, K1, vdd, bias.
- bad.toml [rails.vdd] voltage: expected a voltage of 1 uV to 1 MV, got "-24 V". Check the sign.
- bad.toml [rails.bias] net: expected a net that nothing else holds, got "vdd", held by rail vdd already.
- bad.toml [parts.L1] resistance: expected a resistance of 0 or 1 uohm to 1 Tohm, got "2,2 ohm". Write the decimal point as a point. For example "3.3 kohm".
- bad.toml [parts.L1] inductance: expected only one of inductance and coil, got both. Drop one of them.
- bad.toml [parts.L1] spread: expected a spread table for inductor, got "c-5". 'c-5' is for capacitor.
- bad.toml [parts.C1] capacitance: expected a capacitance of 1 fF to 10 mF, got "5.6 F". Check the prefix and unit.
- bad.toml [parts.C1] spread: expected a known spread table, got "c5". Did you mean c-5? See the list with: tolsim tables
- bad.toml [parts.C1.rating] drain_voltage: expected a rating that capacitor has, got "drain_voltage". Did you mean voltage?
- bad.toml [parts.C1.rating] voltage: expected the rating that limits #2 compares voltage_peak with, got nothing. Add it, or name in the limit the parts it is meant for.
- bad.toml [parts.C2] nets: expected 2 items, got ["a", "ga", "gb"].
- bad.toml [parts.C2] capacitance: expected a capacitance of 1 fF to 10 mF, got 75. Write the unit of measure too, like "2.7 nF".
- bad.toml [parts.C3] kind: expected one of capacitor, inductor, coupling, resistor, potentiometer, diode, clamp, mosfet, drive, load, got "capaciter". Did you mean capacitor?
- bad.toml [parts.R1] resistance: expected a resistance of 1 uohm to 1 Tohm, got "3.3 kF". 'kF' measures something else. For example "3.3 kohm".
- bad.toml [parts.R1] nets: expected different nets at its ends, got net vb at both ends. Joined to one net only it does nothing.
- bad.toml [parts.Q1.sheet.threshold]: expected minimum <= typical <= maximum. Check the row of the datasheet.
- bad.toml [parts.Q1.sheet.capacitance] ciss: expected more than crss (60 pF), got 17 pF. Swap the rows.
- bad.toml [parts.V1] frequency: expected a frequency of 1 Hz to 100 GHz, got nothing. Add it.
- bad.toml [parts.V1] kind: expected no drive in a self-oscillating stage, got "drive". Drop it, or write kind = "driven" at the top of the file.
- bad.toml [parts.K1] coupling: expected a number above -1 and below 1, got 1.2.
- bad.toml [parts.K1] inductors: expected an inductor, got "L3". Known here: L1.
- bad.toml [states]: expected a state with starts_here = true, got none. Say in which state of its load the stage is switched on.
- bad.toml [states.dark.values] Q1.treshold: expected a quantity of that part, got "Q1.treshold". Did you mean Q1.threshold?
- bad.toml [states.dark.values] R9.resistance: expected a part or rail of this study, got "R9". Known here: L1, C1, C2, C3, R1, Q1, V1, K1, vdd, bias.
- bad.toml [states.dark.values] R1.resistance: expected a resistance of 1 uohm to 1 Tohm, got "3 V". 'V' measures something else. For example "3.3 kohm".
- bad.toml [conditions.hot] age: expected an age of 0 h to 1e+07 h, got 1000. Write the unit of measure too, like "10000 h".
- bad.toml [conditions.hot.ambient] law: expected one of asymmetric, fixed, lognormal, sorted-out, student-t, triangular, truncated-normal, uniform, window, got "unifrm". Did you mean uniform?
- bad.toml [limits #1] at_least: expected text with a unit of measure like dB, got 3. Write "3 dB" if it is that.
- bad.toml [limits #2] states: expected a state of this study, got "drak". Did you mean dark?
- bad.toml [limits #2] parts: expected a part or rail of this study, got "Q9". Known here: L1, C1, C2, C3, R1, Q1, V1, K1, vdd, bias.
- bad.toml [limits #3] at_most: expected at_most, at_least or share_of_rating, got none of them. Give the bound.
- bad.toml [limits #3] figure: expected a figure, got "drain_peek". Did you mean drain_peak?
"""
