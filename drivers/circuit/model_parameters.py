"""Which parameters of .model cards are known, which are known to SPICE but have no effect here yet."""

from __future__ import annotations

from collections.abc import Mapping

from drivers.circuit.errors import nearest_names
from drivers.circuit.temperature import BJT_DEFAULTS, DIODE_DEFAULTS

_ALIASES: Mapping[str, Mapping[str, str]] = {
    "d": {"js": "is", "cj": "cjo", "cj0": "cjo", "pb": "vj", "mj": "m", "tref": "tnom"},
    "bjt": {
        "va": "vaf",
        "vb": "var",
        "ik": "ikf",
        "jbf": "ikf",
        "pe": "vje",
        "me": "mje",
        "pc": "vjc",
        "mc": "mjc",
        "tref": "tnom",
    },
}
# Parameters that a value switches off: with it (or none) the model is complete without them.
_NEUTRAL: Mapping[str, Mapping[str, float]] = {
    "d": {"bv": 0.0, "ikf": 0.0, "ikr": 0.0, "isr": 0.0, "cjp": 0.0, "cjsw": 0.0, "jsw": 0.0, "level": 1.0}
    | {"trs1": 0.0, "trs2": 0.0, "tm1": 0.0, "tm2": 0.0, "ttt1": 0.0, "ttt2": 0.0, "cta": 0.0, "ctp": 0.0}
    | {"tpb": 0.0, "tphp": 0.0, "tlev": 0.0, "tlevc": 0.0},
    "bjt": {
        "xtf": 0.0,
        "ptf": 0.0,
        "xcjc": 1.0,
        "cjs": 0.0,
        "ccs": 0.0,
        "csub": 0.0,
        "iss": 0.0,
        "level": 1.0,
    }
    | {"nkf": 0.5, "nk": 0.5, "rco": 0.0, "gamma": 0.0, "qco": 0.0, "tlev": 0.0, "tlevc": 0.0, "subs": 1.0}
    | {
        "tre1": 0.0,
        "tre2": 0.0,
        "trb1": 0.0,
        "trb2": 0.0,
        "trc1": 0.0,
        "trc2": 0.0,
        "tbf1": 0.0,
        "tbf2": 0.0,
    },
}
# Parameters that only say more about one of the above, so that any value is without effect.
_IDLE: Mapping[str, frozenset[str]] = {
    "d": frozenset(
        [
            "ibv",
            "nbv",
            "nr",
            "vp",
            "php",
            "mjsw",
            "fcs",
            "nz",
            "bv_max",
            "id_max",
            "fv_max",
            "te_max",
        ]
    ),
    "bjt": frozenset(
        [
            "vtf",
            "itf",
            "irb",
            "vjs",
            "ps",
            "mjs",
            "ms",
            "ns",
            "vbe_max",
            "vbc_max",
            "vce_max",
            "pd_max",
            "ic_max",
            "ib_max",
            "te_max",
        ]
    ),
}


def canonical_name(kind: str, name: str) -> str:
    """Return the one name of a model parameter that has several, e.g. CJ0 and CJO."""
    return _ALIASES[_family(kind)].get(name.lower(), name.lower())


def known_parameters(kind: str) -> tuple[str, ...]:
    """Return the parameters that have an effect here."""
    return (*(DIODE_DEFAULTS if kind == "d" else BJT_DEFAULTS), "tnom")


def default_value(kind: str, name: str) -> float:
    """Return SPICE's default of a known parameter."""
    return (DIODE_DEFAULTS if kind == "d" else BJT_DEFAULTS)[canonical_name(kind, name)]


def parameter_fault(kind: str, name: str, value: float, given: Mapping[str, float]) -> str:
    """Return what is wrong with a parameter of a .model card, or "" when it is usable.

    Parameters
    ----------
    given : mapping
        All parameters of the card by canonical name.
    """
    if name in known_parameters(kind):
        return _range_fault(name, value)
    family = _family(kind)
    if name in _IDLE[family]:
        return ""
    if name == "rbm":
        same = value == given.get("rb", 0.0)
        return "" if same else "RBM other than RB (base resistance that falls with current) is not modelled"
    if name in _NEUTRAL[family]:
        neutral = _NEUTRAL[family][name]
        if value == neutral:
            return ""
        return f"{name.upper()}={value:g} is not modelled (accepted: {neutral:g}, or leave it out)"
    return f"unknown parameter {name.upper()} {nearest_names(name, known_parameters(kind))}"


def _range_fault(name: str, value: float) -> str:
    positive = ("is", "n", "nf", "nr", "ne", "nc", "bf", "br", "vj", "vje", "vjc", "eg")
    if name in positive and value <= 0.0:
        return f"{name.upper()}={value:g} must be greater than zero"
    if name == "m" and value > 0.9:
        return f"M={value:g} must lie from 0 to 0.9 (SPICE limits it there)"
    if name in ("m", "mje", "mjc", "fc") and not 0.0 <= value < 1.0:
        return f"{name.upper()}={value:g} must lie from 0 to below 1"
    if name == "tnom" and value <= -273.15:
        return f"TNOM={value:g} lies below absolute zero (in °C)"
    signed = ("xti", "xtb", "tnom", "af")
    if name not in signed and value < 0.0:
        return f"{name.upper()}={value:g} must not be negative"
    return ""


def _family(kind: str) -> str:
    return "d" if kind == "d" else "bjt"
