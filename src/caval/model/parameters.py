"""Parameters of the circulation, each with its unit, its allowed range and where its value comes from.

Base set: the 21-compartment model of Heldt et al., J Appl Physiol 2002;92:1239 (doi 10.1152/japplphysiol.00241.2001), as condensed in
secondary sources: resistances, compliances, unstressed volumes, chamber volumes and the ventricles' elastances. Borrowed: valves from
Mynard et al., Int J Numer Meth Biomed Engng 2012;28:626; pericardium from Mynard and Smolich, Ann Biomed Eng 2015;43:1443;
ventricular activation from Stergiopulos et al., Am J Physiol 1996;270:H2050. What was changed so that the healthy adult meets normal values
is called calibrated.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import Field, dataclass, field, fields, is_dataclass, replace
from typing import Any

from caval.errors import InputError

__all__ = ["PRESETS", "Chamber", "Circulation", "Heart", "Pericardium", "Valve", "Vessel", "names", "preset", "source"]

_HELDT = "Heldt 2002"
_MYNARD = "Mynard 2012"
_SAC = "Mynard & Smolich 2015"


def _value(default: float, low: float, high: float, unit: str, source: str) -> Any:
    """A field with its allowed range, unit and source."""
    return field(default=default, metadata={"low": low, "high": high, "unit": unit, "source": source})


@dataclass(frozen=True)
class Chamber:
    """A chamber of the heart: transmural pressure is elastance times the volume above `v0_ml`, more steeply so where `stiffness` is set."""

    v0_ml: float = _value(14.0, 0.0, 200.0, "ml", _HELDT)
    e_rest: float = _value(0.2, 0.005, 5.0, "mmHg/ml", _HELDT)
    e_peak: float = _value(0.5, 0.005, 20.0, "mmHg/ml", _HELDT)
    stiffness: float = _value(0.0, 0.0, 0.2, "1/ml", "exponential stiffening at rest, 0 for a straight line; from memory")

    @classmethod
    def of(cls, v0_ml: float, e_rest: float, e_peak: float) -> Chamber:
        return cls(v0_ml, e_rest, e_peak)


@dataclass(frozen=True)
class Vessel:
    """A compartment: resistance of its outflow, compliance, unstressed volume."""

    r: float = _value(0.1, 1e-4, 100.0, "mmHg·s/ml", _HELDT)
    c: float = _value(1.0, 0.01, 500.0, "ml/mmHg", _HELDT)
    v0_ml: float = _value(100.0, 0.0, 5000.0, "ml", _HELDT)


@dataclass(frozen=True)
class Valve:
    """A valve with inertia whose opening follows the pressure across it. `a_min_cm2` above 0 leaks; a small `a_max_cm2` obstructs."""

    a_max_cm2: float = _value(8.0, 0.1, 20.0, "cm²", _MYNARD)
    a_min_cm2: float = _value(0.0, 0.0, 5.0, "cm²", _MYNARD)
    opening: float = _value(40.0, 0.1, 1000.0, "1/(mmHg·s)", _MYNARD)
    closing: float = _value(53.0, 0.1, 1000.0, "1/(mmHg·s)", _MYNARD)
    length_cm: float = _value(1.5, 0.1, 10.0, "cm", "from memory")


@dataclass(frozen=True)
class Pericardium:
    """Pressure k·exp((V − v0)/φ) on the whole heart; V counts the blood in the four chambers, the muscle and the fluid."""

    k_mmhg: float = _value(0.5, 0.0, 50.0, "mmHg", _SAC)
    v0_ml: float = _value(641.0, 50.0, 2000.0, "ml", _SAC)
    phi_ml: float = _value(40.0, 1.0, 500.0, "ml", _SAC)
    muscle_ml: float = _value(260.0, 0.0, 1000.0, "ml", "from memory")
    fluid_ml: float = _value(20.0, 0.0, 2000.0, "ml", "from memory; an effusion adds to it")


@dataclass(frozen=True)
class Heart:
    """Timing, and what the ventricle does to the atrium through the valve ring."""

    ventricle_delay_s: float = _value(0.010, 0.0, 0.2, "s", "R peak to first pressure rise; calibrated to c 50 to 100 ms after R")
    ventricle_peak_s: float = _value(0.295, 0.05, 1.0, "s", "time to peak elastance at an interval of 1 s, as its root; from memory")
    atrium_delay_s: float = _value(0.04, 0.0, 0.2, "s", "P onset to first atrial tension; from memory")
    atrium_length_s: float = _value(0.19, 0.03, 0.5, "s", "length of atrial contraction; calibrated to P onset → a of 80 to 100 ms")
    leaflet_c: float = _value(0.30, 0.0, 2.0, "ml/mmHg", "bulge of the closed tricuspid leaflets; calibrated to c")
    leaflet_lag_s: float = _value(0.008, 0.002, 0.2, "s", "calibrated to c 50 to 100 ms after R")
    annulus_share: float = _value(0.54, 0.0, 1.0, "1", "atrial room gained by the ring's descent per ml ejected; calibrated to x")
    annulus_lag_s: float = _value(0.016, 0.002, 0.2, "s", "calibrated to x")
    annulus_recoil: float = _value(0.56, 0.0, 1.0, "1", "share of the descent lost with the tension, before refilling; calibrated to v")


@dataclass(frozen=True)
class Circulation:
    """The closed loop. Build others with `with_values`."""

    blood_volume_ml: float = _value(5300.0, 300.0, 12000.0, "ml", _HELDT)
    ra: Chamber = field(default_factory=lambda: Chamber.of(9.0, 0.255, 0.53))
    rv: Chamber = field(default_factory=lambda: Chamber.of(10.0, 0.06, 0.455))
    la: Chamber = field(default_factory=lambda: Chamber.of(24.0, 0.42, 1.0))
    lv: Chamber = field(default_factory=lambda: Chamber.of(18.0, 0.102, 3.2))
    tricuspid: Valve = field(default_factory=lambda: Valve(8.0, 0.0, 40.0, 53.0, 1.5))
    pulmonary: Valve = field(default_factory=lambda: Valve(5.0, 0.0, 27.0, 27.0, 1.5))
    mitral: Valve = field(default_factory=lambda: Valve(6.0, 0.0, 27.0, 53.0, 1.5))
    aortic: Valve = field(default_factory=lambda: Valve(5.0, 0.0, 16.0, 16.0, 1.5))
    pericardium: Pericardium = field(default_factory=Pericardium)
    heart: Heart = field(default_factory=Heart)
    arteries: Vessel = field(default_factory=lambda: Vessel(0.03, 1.5, 715.0))
    upper: Vessel = field(default_factory=lambda: Vessel(0.11, 7.0, 645.0))
    kidneys: Vessel = field(default_factory=lambda: Vessel(0.11, 5.0, 30.0))
    splanchnic: Vessel = field(default_factory=lambda: Vessel(0.07, 50.0, 1146.0))
    legs: Vessel = field(default_factory=lambda: Vessel(0.10, 27.0, 716.0))
    abdominal: Vessel = field(default_factory=lambda: Vessel(0.019, 1.3, 79.0))
    ivc: Vessel = field(default_factory=lambda: Vessel(0.008, 0.5, 33.0))
    svc: Vessel = field(default_factory=lambda: Vessel(0.028, 1.3, 16.0))
    pulmonary_arteries: Vessel = field(default_factory=lambda: Vessel(0.07, 3.4, 160.0))
    pulmonary_veins: Vessel = field(default_factory=lambda: Vessel(0.006, 9.0, 430.0))
    pulmonary_inlet: float = _value(0.006, 0.0, 1.0, "mmHg·s/ml", _HELDT)
    micro_upper: float = _value(4.4, 0.1, 100.0, "mmHg·s/ml", _HELDT)
    micro_kidneys: float = _value(4.7, 0.1, 100.0, "mmHg·s/ml", _HELDT)
    micro_splanchnic: float = _value(2.8, 0.1, 100.0, "mmHg·s/ml", _HELDT)
    micro_legs: float = _value(4.0, 0.1, 100.0, "mmHg·s/ml", _HELDT)

    def __post_init__(self) -> None:
        _check(self, "")
        for name in ("ra", "rv", "la", "lv"):
            chamber = getattr(self, name)
            if chamber.e_peak < chamber.e_rest:
                raise InputError(f"{name}.e_peak = {chamber.e_peak:g} mmHg/ml: it must not be below {name}.e_rest = {chamber.e_rest:g}")

    def with_values(self, values: Mapping[str, float]) -> Circulation:
        """A copy with values by dotted name: ``{"tricuspid.a_min_cm2": 0.3, "blood_volume_ml": 5000}``.

        Raises
        ------
        InputError
            No such parameter, or a value outside its range; the message names both.
        """
        parts: dict[str, Any] = {}
        nested: dict[str, dict[str, float]] = {}
        for name, value in values.items():
            head, dot, tail = name.partition(".")
            known = {f.name: f for f in fields(self)}
            if head not in known or bool(dot) != is_dataclass(getattr(self, head)):
                raise InputError(f"no parameter {name!r}; parameters are: {', '.join(names(self))}")
            if dot:
                if tail not in {f.name for f in fields(getattr(self, head))}:
                    raise InputError(f"no parameter {name!r}; {head} has: {', '.join(f.name for f in fields(getattr(self, head)))}")
                nested.setdefault(head, {})[tail] = value
            else:
                parts[head] = value
        for head, changes in nested.items():
            parts[head] = replace(getattr(self, head), **changes)
        return replace(self, **parts)


def names(parameters: Circulation) -> list[str]:
    """Dotted names of all parameters."""
    found = []
    for f in fields(parameters):
        value = getattr(parameters, f.name)
        found += [f"{f.name}.{g.name}" for g in fields(value)] if is_dataclass(value) else [f.name]
    return found


def _check(node: Any, prefix: str) -> None:
    for f in fields(node):
        value = getattr(node, f.name)
        if is_dataclass(value):
            _check(value, f"{prefix}{f.name}.")
        else:
            _check_value(f, f"{prefix}{f.name}", value)


def _check_value(f: Field[Any], name: str, value: Any) -> None:
    low, high, unit = f.metadata["low"], f.metadata["high"], f.metadata["unit"]
    if not isinstance(value, int | float) or not math.isfinite(value) or not low <= value <= high:
        raise InputError(f"{name} = {value!r}: allowed are {low:g} to {high:g} {unit}")


_CHANGED = {
    "blood_volume_ml": "5700; calibrated: mean right-atrial pressure of 3 with these ventricles",
    "ra.e_rest": "0.30; calibrated: v of 4 to 5",
    "ra.e_peak": "0.74; calibrated: a of 6, and 10 on a shut valve",
    "ra.v0_ml": "14; calibrated: as e_peak",
    "rv.v0_ml": "46; calibrated: end-systolic volume of 80 ml at a diastolic pressure that starts at 1",
    "rv.e_rest": "0.05; calibrated: the rise of diastolic pressure from y to the end-diastolic 6",
    "rv.e_peak": "1.3; calibrated: 25 mmHg with the lower unstressed volume",
    "la.e_rest": "0.50; calibrated: v of 11",
    "la.e_peak": "0.61; calibrated: a of 10",
    "lv.v0_ml": "55; calibrated: end-systolic volume of 58 ml",
    "lv.e_rest": "0.11; calibrated: left-atrial mean of 8 at an end-diastolic volume of 140 ml",
    "lv.e_peak": "2.5; calibrated: 120/77 mmHg with the lower unstressed volume",
}
"""What the healthy adult has otherwise than the base set: the base set's value, and why it was changed."""
_OWN = {
    "arteries.r": "from memory: a few per cent of the systemic resistance",
    "arteries.c": "from memory; calibrated: pulse pressure of some 42 mmHg",
    "arteries.v0_ml": "from memory: blood of the large arteries",
}
"""Values that the base set's condensed form does not give."""

_CHILD_SIZE = 0.29
"""Blood of a child of 20 kg over the adult's."""
_CHILD = "calibrated: a child's size; from memory"


def _child() -> dict[str, tuple[float, str]]:
    """Volumes and compliances in proportion to size; resistances to a pressure of four fifths at half the flow (from memory)."""
    adult = Circulation()
    values = {"blood_volume_ml": adult.blood_volume_ml * _CHILD_SIZE}
    for name in ("ra", "rv", "la", "lv"):
        chamber: Chamber = getattr(adult, name)
        values |= {f"{name}.v0_ml": chamber.v0_ml * _CHILD_SIZE, f"{name}.e_rest": chamber.e_rest / 0.33}
        values[f"{name}.e_peak"] = chamber.e_peak / 0.38
    for f in fields(adult):
        part = getattr(adult, f.name)
        if isinstance(part, Vessel):
            values |= {f"{f.name}.c": part.c * _CHILD_SIZE, f"{f.name}.v0_ml": part.v0_ml * _CHILD_SIZE, f"{f.name}.r": part.r * 1.6}
        elif isinstance(part, Valve):
            values[f"{f.name}.a_max_cm2"] = part.a_max_cm2 * 0.45
        elif f.name.startswith("micro_"):
            values[f.name] = part * 1.55
    values |= {f"pericardium.{n}_ml": getattr(adult.pericardium, f"{n}_ml") * _CHILD_SIZE for n in ("v0", "phi", "muscle", "fluid")}
    values |= {"arteries.c": 0.55, "heart.leaflet_c": adult.heart.leaflet_c * _CHILD_SIZE}
    values |= {"heart.ventricle_peak_s": 0.27, "heart.atrium_length_s": 0.14}
    return {name: (value, _CHILD) for name, value in values.items()}


_FULL = "calibrated: the mean pressure that goes with it, blood kept back"
_DILATED = "calibrated: ventricle that grew with the leak"

_PRESETS: dict[str, dict[str, tuple[float, str]]] = {
    "healthy": {},
    "hypovolaemia": {"blood_volume_ml": (4800.0, "calibrated: a tenth of the blood lost")},
    "right_ventricular_failure": {
        "rv.e_peak": (0.26, "calibrated: half of the contractility"),
        "rv.e_rest": (0.09, "calibrated: end-diastolic 12 to 15"),
        "rv.v0_ml": (40.0, "calibrated: dilated"),
        "pulmonary_arteries.r": (0.12, "calibrated: pulmonary mean of 20 at a normal output"),
        "heart.annulus_share": (0.2, "calibrated: the ring moves little in a failing ventricle; shallow x"),
        "blood_volume_ml": (6000.0, _FULL),
    },
    "acute_tricuspid_regurgitation": {
        "tricuspid.a_min_cm2": (1.3, "calibrated: the regurgitant volume of the chronic preset, within 10 %"),
        "ra.e_rest": (1.1, "calibrated: small stiff atrium, about 1 ml/mmHg; published values reach 0.79"),
        "ra.e_peak": (1.3, "calibrated: stiff in diastole already, so a stays small"),
        "heart.annulus_share": (0.1, "calibrated: no x"),
        "blood_volume_ml": (5750.0, _FULL),
    },
    "chronic_tricuspid_regurgitation": {
        "tricuspid.a_min_cm2": (0.75, "calibrated: a regurgitant volume of some 45 ml"),
        "ra.e_rest": (0.05, "calibrated: large soft atrium, 20 ml/mmHg; published values go down to 0.042"),
        "ra.e_peak": (0.065, "calibrated: weak"),
        "ra.v0_ml": (60.0, "calibrated: large"),
        "rv.v0_ml": (60.0, _DILATED),
        "pericardium.v0_ml": (1000.0, "calibrated: grown with the heart"),
        "heart.annulus_share": (0.3, "calibrated: x weakened by the dilated ring"),
        "blood_volume_ml": (5900.0, _FULL),
    },
    "tricuspid_stenosis": {
        "tricuspid.a_max_cm2": (1.0, "severe stenosis is at most 1 cm²; from memory"),
        "ra.e_peak": (0.85, "calibrated: a hypertrophied atrium"),
        "blood_volume_ml": (5600.0, _FULL),
    },
    "constriction": {
        "pericardium.k_mmhg": (2.0, "calibrated: shell at work from early diastole on"),
        "pericardium.v0_ml": (600.0, "calibrated: as k"),
        "pericardium.phi_ml": (15.0, "calibrated: stiff shell; deep steep y, then a plateau"),
        "ra.e_rest": (0.4, "calibrated: the atrial wall is in the shell too"),
        "ra.e_peak": (0.6, "calibrated: as at rest"),
        "heart.annulus_share": (0.12, "calibrated: adherent pericardium holds the ring; x shallower than y"),
        "blood_volume_ml": (6200.0, _FULL),
    },
    "tamponade": {
        "pericardium.fluid_ml": (350.0, "calibrated: the atrium's transmural pressure stays low"),
        "pericardium.k_mmhg": (4.0, "calibrated: pericardial 8 to 14 mmHg throughout"),
        "pericardium.v0_ml": (700.0, "calibrated: as k"),
        "pericardium.phi_ml": (100.0, "calibrated: fluid couples the chambers without a hard stop"),
        "blood_volume_ml": (6300.0, _FULL),
    },
    "restrictive": {
        "rv.e_rest": (0.05, "calibrated: yields at first, steep y"),
        "rv.v0_ml": (30.0, "calibrated: as e_rest"),
        "rv.stiffness": (0.022, "calibrated: stiffens as it fills; dip and plateau"),
        "lv.e_rest": (0.15, "calibrated: left-atrial mean above 10"),
        "ra.e_rest": (0.35, "calibrated: the atrium's wall is stiff too"),
        "ra.e_peak": (0.9, "calibrated: tall a"),
        "heart.annulus_share": (0.3, "calibrated: poor long-axis motion; x no deeper than y"),
        "blood_volume_ml": (6000.0, _FULL),
    },
    "child": _child(),
}

PRESETS: dict[str, dict[str, float]] = {name: {key: value for key, (value, _) in table.items()} for name, table in _PRESETS.items()}
"""Changes from the healthy adult, by name. `source` says where each comes from."""


def source(name: str, circulation: str = "healthy") -> str:
    """Where the value of a parameter comes from, in the circulation of that name.

    Raises
    ------
    InputError
        No such parameter or circulation.

    Examples
    --------
    >>> source("svc.c")
    'Heldt 2002'
    >>> source("ra.e_rest")
    'Heldt 2002 has 0.30; calibrated: v of 4 to 5'
    >>> source("tricuspid.a_max_cm2", "tricuspid_stenosis")
    'severe stenosis is at most 1 cm²; from memory'
    """
    parameters = preset(circulation)
    if name not in names(parameters):
        raise InputError(f"no parameter {name!r} in a circulation; it has: {', '.join(names(parameters))}")
    if name in _PRESETS[circulation]:
        return _PRESETS[circulation][name][1]
    head, _, tail = name.partition(".")
    known = {f.name: f for f in fields(getattr(parameters, head) if tail else parameters)}
    base = str(known[tail or head].metadata["source"])
    if name in _OWN:
        return _OWN[name]
    return f"{base} has {_CHANGED[name]}" if name in _CHANGED else base


def preset(name: str) -> Circulation:
    """The circulation of that name; InputError lists the names."""
    if name not in PRESETS:
        raise InputError(f"no circulation {name!r}; there are: {', '.join(PRESETS)}")
    return Circulation().with_values(PRESETS[name])
