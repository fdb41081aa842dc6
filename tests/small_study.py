"""A small study and a few tables for the tests of spread: built from records, not from files."""

from tolsim.design import Condition, Design, Rail, Run, State, Study
from tolsim.parts import (
    Capacitor,
    Clamp,
    Coil,
    Coupling,
    Diode,
    Drive,
    Inductor,
    Load,
    Mosfet,
    Potentiometer,
    Resistor,
)
from tolsim.spread.reading import read_tables

TABLES = b"""
[table.c-5]
title = "Capacitor, 5 %"
for = "capacitor"
basis = "guess"
source = "made for a test"
[table.c-5.capacitance]
tolerance = {law = "uniform", half_width = "5 %"}

[table.l-5]
title = "Inductor, 5 %"
for = "inductor"
basis = "guess"
source = "made for a test"
[table.l-5.inductance]
tolerance = {law = "uniform", half_width = "5 %"}

[table.c-lot]
title = "Capacitor with lot shift, slope and ageing"
for = "capacitor"
basis = "guess"
source = "made for a test"
[table.c-lot.capacitance]
tolerance = {law = "truncated-normal", half_width = "2.4 %", sigma = "0.8 %"}
lot = {law = "truncated-normal", half_width = "7.5 %", sigma = "2.5 %"}
temperature.law = "linear"
temperature.slope = {law = "uniform", low = "-60 ppm/K", high = "0 ppm/K"}
temperature.shared = "reel"
ageing.law = "log-time"
ageing.rate = {law = "uniform", low = "-3 %", high = "-2 %"}
ageing.reference = "1000 h"
[table.c-lot.esr]
tolerance = {law = "lognormal", sigma = 0.15, low = "-45 %", high = "80 %"}

[table.m-window]
title = "MOSFET in its window"
for = "mosfet"
basis = "guess"
source = "made for a test"
[table.m-window.threshold]
deviation = "position"
implied_half_window = "0.5 V"
lot = {law = "uniform", low = -0.7, high = 0.7}
tolerance = {law = "uniform", low = -0.3, high = 0.3}
[table.m-window.gain]
tolerance = {law = "uniform", half_width = "20 %"}
[table.m-window.capacitance_scale]
tolerance = {law = "uniform", half_width = "10 %"}

[table.pot]
title = "Potentiometer"
for = "potentiometer"
basis = "guess"
source = "made for a test"
[table.pot.setting]
deviation = "absolute"
tolerance = {law = "uniform", half_width = "60 %"}

[table.dark]
title = "Load, dark"
for = "load"
basis = "guess"
source = "made for a test"
[table.dark.resistance]
tolerance = {law = "uniform", half_width = "50 %"}

[table.lit]
title = "Load, lit"
for = "load"
basis = "guess"
source = "made for a test"
[table.lit.resistance]
tolerance = {law = "uniform", half_width = "10 %"}

[table.supply]
title = "Supply"
for = "rail"
basis = "guess"
source = "made for a test"
[table.supply.voltage]
tolerance = {law = "uniform", half_width = "2 %"}
"""


def tables(data=TABLES):
    """Tables of the text above, or of another one."""
    problems = []
    read = read_tables(data, "test.toml", problems)
    assert problems == []
    return read


def study(parts, rails=None, states=None, conditions=None):
    """Study of some parts; nets are not looked at by anything that spreads."""
    return Study(
        title="test",
        design=Design(parts=parts, rails=rails or {}),
        states=states or {"normal": State(starts_here=True)},
        conditions=conditions or {"room": Condition()},
        limits=(),
        run=Run(),
    )


def capacitor(**keys: object):
    """Capacitor of 1 nF."""
    return Capacitor(**{"kind": "capacitor", "nets": ("a", "gnd"), "capacitance": 1e-9, **keys})


def inductor(**keys: object):
    """Inductor of 1 uH without loss, unless it has a coil or Q."""
    own = {} if "coil" in keys else {"inductance": 1e-6}
    own |= {} if "q" in keys else {"resistance": 0.0}
    return Inductor(**{"kind": "inductor", "nets": ("a", "b"), **own, **keys})


def mosfet(**keys: object):
    """MOSFET by model parameters, unless it has a sheet."""
    own = {} if "sheet" in keys else {"model": {"threshold": 3.4, "gain": 11.0, "cgs": 2e-9}}
    return Mosfet(**{"kind": "mosfet", "drain": "a", "gate": "g", **own, **keys})


def everything():
    """Study with a part of every kind, two states and two conditions."""
    parts = {
        "C1": capacitor(spread="c-lot", reel="tank", pieces=3, tan_delta=1e-3, loss_frequency=1e6),
        "C2": capacitor(spread="c-lot", reel="tank"),
        "C3": capacitor(spread="c-lot"),
        "L1": inductor(coil=Coil(turns=10, diameter=0.02, length=0.02), q=200.0, q_frequency=1e7),
        "L2": inductor(spread="l-5", resistance=0.06),
        "K1": Coupling(kind="coupling", inductors=("L1", "L2"), coupling=0.3),
        "R1": Resistor(kind="resistor", nets=("a", "gnd"), resistance=3300.0),
        "P1": Potentiometer(
            kind="potentiometer",
            nets=("gnd", "w", "vb"),
            resistance=1e4,
            setting=0.5,
            end_zone=0.02,
            spread="pot",
        ),
        "D1": Diode(kind="diode", anode="a", cathode="b", voltage=0.6, resistance=0.1),
        "Z1": Clamp(kind="clamp", nets=("g", "gnd"), voltage=18.0, resistance=0.2),
        "Q1": mosfet(spread="m-window", reel="fets"),
        "Q2": mosfet(spread="m-window", reel="fets"),
        "V1": Drive(kind="drive", nets=("g", "gnd"), high=10.0, frequency=1e6, resistance=2.0),
        "LAMP": Load(
            kind="load", coil="L1", coupling=0.4, inductance=2e-7, resistance=5.0, spread="lit"
        ),
    }
    rails = {
        "vdd": Rail(net="vdd", voltage=24.0, spread="supply"),
        "vb": Rail(net="vb", voltage=4.2, follows_supply=False),
    }
    states = {
        "dark": State(values={"LAMP.resistance": 500.0}, spread={"LAMP": "dark"}),
        "full": State(starts_here=True),
    }
    hot = {"law": "uniform", "low": "50 degC", "high": "70 degC"}
    conditions = {
        "room": Condition(),
        "hot": Condition(ambient=hot, supply=-0.1, age=1e4, board_rise=10.0),
    }
    return study(parts, rails, states, conditions)
