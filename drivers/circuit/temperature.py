"""Model parameters at the circuit's temperature, after SPICE: saturation currents, gains, leakage, charges.

References
----------
SPICE3 user's manual (UCB, 1993), section "Temperature dependence"; where it leaves a constant open, what
ngspice 39 computes (compared in tests/circuit).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from drivers.circuit.elements import BjtLaw, DiodeLaw, JunctionCharge

BOLTZMANN_J_PER_K = 1.380649e-23
"""SI 2019, exact."""
ELEMENTARY_CHARGE_C = 1.602176634e-19
"""SI 2019, exact."""
ZERO_CELSIUS_K = 273.15
_REFERENCE_K = 300.15
_SILICON_GAP_AT_REFERENCE_EV = 1.1150877
_LARGEST_DIODE_FC = 0.95
_LARGEST_BJT_FC = 0.9999

DIODE_DEFAULTS: Mapping[str, float] = {
    "is": 1e-14,
    "n": 1.0,
    "rs": 0.0,
    "tt": 0.0,
    "cjo": 0.0,
    "vj": 1.0,
    "m": 0.5,
    "eg": 1.11,
    "xti": 3.0,
    "fc": 0.5,
    "kf": 0.0,
    "af": 1.0,
}
BJT_DEFAULTS: Mapping[str, float] = {
    "is": 1e-16,
    "bf": 100.0,
    "br": 1.0,
    "nf": 1.0,
    "nr": 1.0,
    "vaf": 0.0,
    "var": 0.0,
    "ikf": 0.0,
    "ikr": 0.0,
    "ise": 0.0,
    "ne": 1.5,
    "isc": 0.0,
    "nc": 2.0,
    "rb": 0.0,
    "re": 0.0,
    "rc": 0.0,
    "cje": 0.0,
    "vje": 0.75,
    "mje": 0.33,
    "cjc": 0.0,
    "vjc": 0.75,
    "mjc": 0.33,
    "fc": 0.5,
    "tf": 0.0,
    "tr": 0.0,
    "eg": 1.11,
    "xti": 3.0,
    "xtb": 0.0,
    "kf": 0.0,
    "af": 1.0,
}


def thermal_volts(celsius: float) -> float:
    """Return kT/q in volts."""
    return BOLTZMANN_J_PER_K * (celsius + ZERO_CELSIUS_K) / ELEMENTARY_CHARGE_C


@dataclass(frozen=True)
class _Shift:
    """From the temperature at which the parameters were measured to the circuit's, in kelvin."""

    nominal_k: float
    k: float

    @property
    def vt_volts(self) -> float:
        return BOLTZMANN_J_PER_K * self.k / ELEMENTARY_CHARGE_C

    @property
    def log_ratio(self) -> float:
        return math.log(self.k / self.nominal_k)

    def saturation_exponent(self, eg_ev: float, xti: float) -> float:
        """Return the logarithm of IS(T) / IS(nominal)."""
        return (self.k / self.nominal_k - 1.0) * eg_ev / self.vt_volts + xti * self.log_ratio

    def depletion(self, cj_farads: float, vj_volts: float, m: float) -> tuple[float, float]:
        """Return CJ and VJ at the circuit's temperature.

        Whatever the semiconductor, SPICE uses the gap of silicon here.
        """
        at_reference = (vj_volts - _potential_shift(self.nominal_k)) / (self.nominal_k / _REFERENCE_K)
        from_nominal = (vj_volts - at_reference) / at_reference
        farads = cj_farads / (1.0 + m * (4e-4 * (self.nominal_k - _REFERENCE_K) - from_nominal))
        volts = self.k / _REFERENCE_K * at_reference + _potential_shift(self.k)
        to_now = (volts - at_reference) / at_reference
        return farads * (1.0 + m * (4e-4 * (self.k - _REFERENCE_K) - to_now)), volts


def _potential_shift(kelvin: float) -> float:
    gap_ev = 1.16 - 7.02e-4 * kelvin * kelvin / (kelvin + 1108.0)
    volts_per_k = BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C
    inner = -gap_ev / (2.0 * volts_per_k * kelvin) + _SILICON_GAP_AT_REFERENCE_EV / (
        2.0 * volts_per_k * _REFERENCE_K
    )
    return -2.0 * volts_per_k * kelvin * (1.5 * math.log(kelvin / _REFERENCE_K) + inner)


def diode_law(given: Mapping[str, float], *, area: float, celsius: float, tnom_celsius: float) -> DiodeLaw:
    """Return the diode's parameters at a temperature, times its area.

    Parameters
    ----------
    given : mapping
        Parameters of the .model card by lower-case name; the rest are SPICE's defaults.
    """
    p = {**DIODE_DEFAULTS, **given}
    shift = _Shift(p.get("tnom", tnom_celsius) + ZERO_CELSIUS_K, celsius + ZERO_CELSIUS_K)
    cj, vj = shift.depletion(p["cjo"], p["vj"], p["m"])
    return DiodeLaw(
        is_amps=area * p["is"] * math.exp(shift.saturation_exponent(p["eg"], p["xti"]) / p["n"]),
        n=p["n"],
        vt_volts=shift.vt_volts,
        rs_ohms=p["rs"] / area,
        charge=JunctionCharge(area * cj, vj, p["m"], min(p["fc"], _LARGEST_DIODE_FC), p["tt"]),
    )


def bjt_law(
    given: Mapping[str, float], *, polarity: int, area: float, celsius: float, tnom_celsius: float
) -> BjtLaw:
    """Return the transistor's parameters at a temperature, times its area.

    Parameters
    ----------
    given : mapping
        Parameters of the .model card by lower-case name; the rest are SPICE's defaults.
    polarity : int
        +1 NPN, -1 PNP.
    """
    p = {**BJT_DEFAULTS, **given}
    shift = _Shift(p.get("tnom", tnom_celsius) + ZERO_CELSIUS_K, celsius + ZERO_CELSIUS_K)
    exponent = shift.saturation_exponent(p["eg"], p["xti"])
    gain = math.exp(shift.log_ratio * p["xtb"])
    cje, vje = shift.depletion(p["cje"], p["vje"], p["mje"])
    cjc, vjc = shift.depletion(p["cjc"], p["vjc"], p["mjc"])
    fc = min(p["fc"], _LARGEST_BJT_FC)
    return BjtLaw(
        polarity=polarity,
        is_amps=area * p["is"] * math.exp(exponent),
        bf=p["bf"] * gain,
        br=p["br"] * gain,
        nf=p["nf"],
        nr=p["nr"],
        vaf_volts=p["vaf"] or math.inf,
        var_volts=p["var"] or math.inf,
        ikf_amps=area * p["ikf"] or math.inf,
        ikr_amps=area * p["ikr"] or math.inf,
        ise_amps=area * p["ise"] * math.exp(exponent / p["ne"]) / gain,
        ne=p["ne"],
        isc_amps=area * p["isc"] * math.exp(exponent / p["nc"]) / gain,
        nc=p["nc"],
        rb_ohms=p["rb"] / area,
        re_ohms=p["re"] / area,
        rc_ohms=p["rc"] / area,
        vt_volts=shift.vt_volts,
        be=JunctionCharge(area * cje, vje, p["mje"], fc, p["tf"]),
        bc=JunctionCharge(area * cjc, vjc, p["mjc"], fc, p["tr"]),
    )
