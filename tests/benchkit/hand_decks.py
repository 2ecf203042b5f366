"""Decks of the nine stages in the eight scenarios, written by hand.

Every formula is that of the published law; what is filled in (``{...}`` in the laws' texts) are
the parameters of the stage's fitted laws at 25 C, and numbers of ``nine_stages`` stand as they
are. All decks have the four terminals as nodes ep, em, gp, gm; the stage ties two of them.
i(vexp) is the current into the exposed port, i(vmain) that into the main part's first terminal.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from benchkit.parts.bipolar import BipolarLaw
from benchkit.parts.diode import DiodeLaw
from benchkit.parts.fuse import FuseLaw
from benchkit.parts.knee import KneeLaw
from benchkit.parts.mosfet import MosfetLaws
from benchkit.placing import Law

HEAD = """* by hand: {title}
.param tc={celsius} tk={{tc+273.15}} ratio={{tk/298.15}} vt={{8.617333262e-5*tk}}
.param cold={{1/8.617333262e-5*(1/tk-1/298.15)}}
.func above(x) {{0.5*(x+abs(x))}}
.func softplus(x) {{above(x)+ln(1+exp(-abs(x)))}}
.options temp={celsius} tnom=25 reltol=1e-6 abstol=1e-12 vntol=1e-9 gmin=1e-13 itl1=500
"""

DIODE = """
.subckt {ref} a k
D1 a k shockley
.model shockley D(IS={saturation_A} N={ideality} RS={series_ohm} EG={bandgap_V} XTI={exponent})
"""
LEAKS = """
.param is={{{saturation_A}*exp({exponent}/{ideality}*ln(ratio)-{bandgap_V}/{ideality}*cold)}}
.param nvt={{{ideality}*vt}} stays={{0.9*is/(1+is*{series_ohm}/nvt)}}
.param unit={{{leakage_A}*2**((tc-25)/{leakage_doubles_K})/(1+{leakage_V})**{leakage_power}}}
B1 k a I=max(unit*(1+above(v(k,a)))^{leakage_power}-is,-stays)*(1-exp(-above(v(k,a))/nvt))
"""
BREAKS = """
.param vz={{{volts_V}+{tempco_V_per_K}*(tc-25)}}
R1 k i {series_ohm}
B2 i a I={test_A}*exp(min((v(i,a)-vz+{test_A}*{series_ohm})/{scale_V},100))
"""
EKV = """
.param unit={{2*1.2*{gain}*ratio**(-{exponent})*vt*vt}} th={{{threshold}-0.002*(tc-25)}}
R1 d x {{{series}*ratio**{exponent}}}
"""
NMOS = """
.subckt {ref} d g s
B1 x s I=unit*(softplus((v(g,s)-th)/(2*1.2*vt))^2-softplus(((v(g,s)-th)/1.2-v(x,s))/(2*vt))^2)
X1 s d {ref}body
"""
PMOS = """
.subckt {ref} d g s
B1 s x I=unit*(softplus((v(s,g)-th)/(2*1.2*vt))^2-softplus(((v(s,g)-th)/1.2-v(s,x))/(2*vt))^2)
X1 d s {ref}body
"""
BIPOLAR = """
.subckt {ref} c b e
Q1 c b e gummel
.model gummel {letters}(IS={saturation_A} BF={forward_gain} BR={reverse_gain} RC={collector_ohm}
+ EG=1.11 XTI=3 XTB=1.5)
X1 {anode} {cathode} {ref}breaks
.ends
.subckt {ref}breaks a k
"""
FUSE = """
.subckt {ref} a b
V1 a x 0
B1 x b V=i(V1)*{cold_ohm}*(1+3.8e-3*(tc-25))*(1+{hot_ratio}*min((i(V1)/{fusing_A})^2,1))
.ends
"""

STAGES = {
    "clamp": """
Vmain gm a 0
XD1 a gp D1
Vplus ep gp 0
Vminus em gm 0
""",
    "fused-clamp": """
XF1 ep gp F1
Vmain gm a 0
XD1 a gp D1
Vminus em gm 0
""",
    "series-diode": """
Vmain ep a 0
XD1 a gp D1
Vminus em gm 0
""",
    "pmos-pass": """
Vmain ep d 0
XQ1 d gate gp Q1
RR1 gate em 1k
Vminus em gm 0
""",
    "pmos-pass-zener": """
Vmain ep d 0
XQ1 d gate gp Q1
RR1 gate em 4.7k
XZ1 gate gp Z1
Vminus em gm 0
""",
    "pmos-sensed": """
Vmain ep d 0
XQ1 d gate gp Q1
RR1 gate gp 100k
XQ2 gate base em Q2
RR2 ep base 47k
Vminus em gm 0
""",
    "nmos-pass": """
Vmain em d 0
XQ1 d gate gm Q1
RR1 gate ep 1k
Vplus ep gp 0
""",
    "nmos-pass-zener": """
Vmain em d 0
XQ1 d gate gm Q1
RR1 gate ep 4.7k
XZ1 gm gate Z1
Vplus ep gp 0
""",
    "nmos-sensed": """
Vmain em d 0
XQ1 d gate gm Q1
RR1 gate gm 100k
XQ2 gate base ep Q2
RR2 em base 47k
Vplus ep gp 0
""",
}
PROTECTS = {"pmos-sensed": "XD1 em base D1\n", "nmos-sensed": "XD1 base ep D1\n"}
"""The diode that keeps the sensing transistor's base from breaking down."""

SUPPLY_ON = """
B9 gm gp I=0.065*(softplus((12-v(gp,gm))/0.005/0.065)-softplus(((12-v(gp,gm))/0.005-3)/0.065))
R9 gp gm 1k
"""
SCENARIOS = {
    "right-way": """
V8 s em 15
R8 s p 1m
Vexp p ep 0
I9 gp gm 3
""",
    "right-way supply": """
Vexp p ep 0
I8 p em 3
V9 s gm 15
R9 s gp 1m
""",
    "reversed-source": """
V8 em s 15
R8 s p 0.05
Vexp p ep 0
R9 gp gm 6
""",
    "reversed-source-charged": """
V8 em s 15
R8 s p 0.05
Vexp p ep 0
V9 h gm 12
R9 h gp 0.05
R10 gp gm 6
""",
    "reversed-battery-off": """
V8 em s 15
R8 s p 0.02
Vexp p ep 0
R9 gp gm 1k
""",
    "reversed-battery-on": f"""
V8 em s 15
R8 s p 0.02
Vexp p ep 0
{SUPPLY_ON}
""",
    "back-feed": """
V8 s em 15
R8 s p 0.02
Vexp p ep 0
R9 gp gm 1k
""",
    "flat-battery": f"""
V8 s em 0.1
R8 s p 0.02
Vexp p ep 0
{SUPPLY_ON}
""",
    "open": f"""
R8 p em 10meg
Vexp p ep 0
{SUPPLY_ON}
""",
}
BEFORE = {
    "reversed-battery-on": ".nodeset v(gp)=12",
    "flat-battery": ".nodeset v(gp)=12",
    "open": ".nodeset v(gp)=12 v(ep)=12",
    "pmos-sensed open": ".nodeset v(gp)=12 v(ep)=0 v(gate)=12",
    "nmos-sensed open": ".nodeset v(gp)=0 v(ep)=0 v(gm)=-12 v(gate)=-12",
}
"""Where ngspice starts with equipment that is on, and nowhere else: at the equipment's voltage. A
supply in its limit has no slope, with which its own iteration from zero gets nowhere.
The sensed stages have two operating points while open; this asks for the one that is off, since a
gate follows its source as the equipment is switched on."""


def _values(law: object) -> dict[str, float]:
    """A typical law's numbers; a sample of one board has arrays of one entry."""
    return {
        key: float(np.ravel(value)[0])
        for key, value in vars(law).items()
        if value is not None and not isinstance(value, KneeLaw)
    }


def _diode(ref: str, law: DiodeLaw) -> str:
    values = _values(law)
    text = DIODE.format(ref=ref, **values)
    if values["leakage_A"] > 0:
        text += LEAKS.format(**values)
    if law.knee is not None:
        text += BREAKS.format(**_values(law.knee))
    return text + ".ends\n"


def _part(ref: str, kind: str, law: Law) -> str:
    if isinstance(law, DiodeLaw):
        return _diode(ref, law)
    if isinstance(law, FuseLaw):
        return FUSE.format(ref=ref, **_values(law))
    if isinstance(law, MosfetLaws):
        channel = _values(law.channel)
        fitted = EKV.format(
            gain=channel["gain_A_per_V2"], threshold=channel["threshold_V"],
            series=channel["series_ohm"], exponent=channel["exponent"],
        )  # fmt: skip
        wired = (NMOS if kind == "n-mosfet" else PMOS).format(ref=ref)
        return f"{wired}{fitted}.ends\n{_diode(f'{ref}body', law.body)}"
    if isinstance(law, BipolarLaw):
        # In reverse from emitter to base in an NPN: the knee's cathode is the emitter.
        letters, anode, cathode = ("NPN", "b", "e") if kind == "npn" else ("PNP", "e", "b")
        text = BIPOLAR.format(
            ref=ref, letters=letters, anode=anode, cathode=cathode, **_values(law)
        )
        return text + BREAKS.format(**_values(law.breakdown)) + ".ends\n"
    return ""


def hand_deck(
    topology: str, scenario: str, guards: str, celsius: float, laws: Mapping[str, tuple[str, Law]]
) -> str:
    """Stage and scenario put together; laws: kind and typical law by reference."""
    around = SCENARIOS.get(f"{scenario} {guards}", SCENARIOS[scenario])
    return "\n".join([
        HEAD.format(title=f"{topology} {scenario}", celsius=celsius),
        STAGES[topology], PROTECTS.get(topology, "") if "D1" in laws else "", around,
        BEFORE.get(f"{topology} {scenario}", BEFORE.get(scenario, "")),
        "Vground em 0 0", *(_part(ref, kind, law) for ref, (kind, law) in laws.items()),
        ".end", "",
    ])  # fmt: skip
