"""A small push-pull study that runs in seconds: one state, one or two conditions, few units."""

from __future__ import annotations

CONDITION = """
[conditions.{name}]
ambient = "{ambient} degC"
supply = "{supply} %"
"""

HEAD = """
title = "Quick push-pull"
scenario = "Invented for tests: twelve hand-built stages."
kind = "self-oscillating"

[run]
units = {units}
seed = {seed}
steps_per_cycle = 128
solver = "{solver}"
rank = ["QA.drain_peak"]

[rails.vdd]
net = "vdd"
voltage = "24 V"
spread = "supply-adjusted"

[rails.vb]
net = "vb"
voltage = "{bias} V"

[parts.L]
kind = "inductor"
nets = ["p", "q"]
inductance = "2.2 uH"
resistance = "3.6 ohm"
spread = "air-coil-on-former"

[states.lit]
starts_here = true

[[limits]]
figure = "drain_peak"
share_of_rating = {drain_share}
rule = "share of rated drain voltage"

[[limits]]
figure = "start_margin"
at_least = "3 dB"
rule = "3 dB to start"
"""

SIDE = """
[parts.L{up}]
kind = "inductor"
nets = ["vdd", "{low}"]
inductance = "18 uH"
resistance = "60 mohm"
spread = "choke-iron-powder"

[parts.C{up}]
kind = "capacitor"
nets = ["{low}", "gnd"]
capacitance = "3 nF"
spread = "class1-ceramic-5pct"
reel = "shunt"

[parts.CS{up}]
kind = "capacitor"
nets = ["{low}", "{near}"]
capacitance = "510 pF"
spread = "class1-ceramic-5pct"

[parts.CF{up}]
kind = "capacitor"
nets = ["{far}", "g{low}"]
capacitance = "75 pF"
spread = "class1-ceramic-5pct"

[parts.CG{up}]
kind = "capacitor"
nets = ["g{low}", "gnd"]
capacitance = "1.6 nF"

[parts.RB{up}]
kind = "resistor"
nets = ["vb", "g{low}"]
resistance = "3.3 kohm"

[parts.Q{up}]
kind = "mosfet"
drain = "{low}"
gate = "g{low}"
source_net = "gnd"
spread = "mosfet-matched-reel"
reel = "Q"
thermal_resistance = "1.5 K/W"
model = {{ threshold = "3.4 V", gain = "11 A/V^2", cgd0 = "280 pF", cds0 = "1.4 nF" }}
rating = {{ drain_voltage = "100 V", gate_voltage = "20 V" }}
"""


def text(
    units: int = 12,
    seed: int = 5,
    bias: float = 4.2,
    drain_share: float = 0.63,
    solver: str = "shooting",
    conditions: tuple[tuple[str, float, float], ...] = (("room", 25, 0),),
) -> str:
    """TOML of the study; conditions are (name, degC, supply deviation in percent)."""
    head = HEAD.format(units=units, seed=seed, bias=bias, drain_share=drain_share, solver=solver)
    sides = [
        SIDE.format(up=up, low=up.lower(), near=near, far=far)
        for up, near, far in (("A", "p", "q"), ("B", "q", "p"))
    ]
    cases = [CONDITION.format(name=n, ambient=t, supply=s) for n, t, s in conditions]
    return "".join([head, *sides, *cases])
