"""Device equations of SPICE as scalar functions: junctions, diode, Gummel-Poon transistor, their charges.

Every function takes floats, returns a tuple of floats and uses nothing but arithmetic and `math`, so that it
runs as plain Python and compiles with ``numba.njit`` unchanged. Voltages are in the device's own polarity
(PNP: negate node voltages before, currents after). gmin is not in here: whoever assembles the circuit puts
it across junctions.

Below -3 N VT SPICE replaces the exponential by a cubic tail that meets it with equal slope; germanium stages
feel the difference (tens of microvolts), so the tail is part of the law here too.

References
----------
L. W. Nagel, "SPICE2: A Computer Program to Simulate Semiconductor Circuits", UCB/ERL M520, 1975, appendix 2.
H. K. Gummel and H. C. Poon, "An Integral Charge Control Model of Bipolar Transistors", Bell Syst. Tech. J.
49, 1970.
"""

from __future__ import annotations

import math

from drivers.circuit.elements import BjtLaw, DiodeLaw

_E = math.e
_LARGEST_EXPONENT = 80.0  # e^80 amps per amp is past every real bias; beyond it the law goes on straight


def junction_current(volts: float, is_amps: float, nvt_volts: float) -> tuple[float, float]:
    """Return current and conductance of an ideal junction, (amps, siemens)."""
    if volts < -3.0 * nvt_volts:
        per_volt = 1.0 / volts
        tail = 3.0 / _E * nvt_volts * per_volt
        tail = tail * tail * tail
        return -is_amps * (1.0 + tail), is_amps * 3.0 * tail * per_volt
    x = volts / nvt_volts
    if x > _LARGEST_EXPONENT:
        top = math.exp(_LARGEST_EXPONENT)
        return is_amps * (top * (1.0 + x - _LARGEST_EXPONENT) - 1.0), is_amps * top / nvt_volts
    exponential = math.exp(x)
    return is_amps * (exponential - 1.0), is_amps * exponential / nvt_volts


def depletion_charge(
    volts: float, cj_farads: float, vj_volts: float, m: float, fc: float
) -> tuple[float, float]:
    """Return charge and capacitance of a depletion layer, (coulombs, farads).

    Above FC VJ the capacitance goes on along its tangent, as in SPICE.
    """
    if cj_farads == 0.0:
        return 0.0, 0.0
    corner = fc * vj_volts
    if volts < corner:
        depth = 1.0 - volts / vj_volts
        shape = math.exp(-m * math.log(depth))
        return cj_farads * vj_volts * (1.0 - depth * shape) / (1.0 - m), cj_farads * shape
    f1 = vj_volts * (1.0 - math.exp((1.0 - m) * math.log(1.0 - fc))) / (1.0 - m)
    f2 = math.exp((1.0 + m) * math.log(1.0 - fc))
    f3 = 1.0 - fc * (1.0 + m)
    above = f3 * (volts - corner) + m / (2.0 * vj_volts) * (volts * volts - corner * corner)
    return cj_farads * (f1 + above / f2), cj_farads * (f3 + m * volts / vj_volts) / f2


def diode_charge(
    volts: float,
    is_amps: float,
    nvt_volts: float,
    cj_farads: float,
    vj_volts: float,
    m: float,
    fc: float,
    tt_s: float,
) -> tuple[float, float]:
    """Return charge and capacitance of a diode, depletion and diffusion, (coulombs, farads)."""
    coulombs, farads = depletion_charge(volts, cj_farads, vj_volts, m, fc)
    if tt_s != 0.0:
        amps, siemens = junction_current(volts, is_amps, nvt_volts)
        coulombs += tt_s * amps
        farads += tt_s * siemens
    return coulombs, farads


def base_charge(
    vbe: float,
    vbc: float,
    forward_amps: float,
    forward_siemens: float,
    reverse_amps: float,
    reverse_siemens: float,
    inverse_vaf: float,
    inverse_var: float,
    inverse_ikf: float,
    inverse_ikr: float,
) -> tuple[float, float, float]:
    """Return Gummel and Poon's normalised base charge and its slopes, (qb, dqb/dvbe, dqb/dvbc)."""
    q1 = 1.0 / (1.0 - inverse_vaf * vbc - inverse_var * vbe)
    if inverse_ikf == 0.0 and inverse_ikr == 0.0:
        return q1, q1 * q1 * inverse_var, q1 * q1 * inverse_vaf
    root_of = 1.0 + 4.0 * (inverse_ikf * forward_amps + inverse_ikr * reverse_amps)
    root = 1.0
    if root_of > 0.0:
        root = math.sqrt(root_of)
    qb = q1 * (1.0 + root) / 2.0
    by_vbe = q1 * (qb * inverse_var + inverse_ikf * forward_siemens / root)
    by_vbc = q1 * (qb * inverse_vaf + inverse_ikr * reverse_siemens / root)
    return qb, by_vbe, by_vbc


def transport(
    vbe: float,
    vbc: float,
    is_amps: float,
    nf_vt: float,
    nr_vt: float,
    inverse_vaf: float,
    inverse_var: float,
    inverse_ikf: float,
    inverse_ikr: float,
) -> tuple[float, float, float, float, float, float, float]:
    """Return what currents and charges share, (If, dIf/dvbe, Ir, dIr/dvbc, qb, dqb/dvbe, dqb/dvbc)."""
    forward, g_forward = junction_current(vbe, is_amps, nf_vt)
    reverse, g_reverse = junction_current(vbc, is_amps, nr_vt)
    qb, qb_by_vbe, qb_by_vbc = base_charge(
        vbe,
        vbc,
        forward,
        g_forward,
        reverse,
        g_reverse,
        inverse_vaf,
        inverse_var,
        inverse_ikf,
        inverse_ikr,
    )
    return forward, g_forward, reverse, g_reverse, qb, qb_by_vbe, qb_by_vbc


def terminal_currents(
    vbe: float,
    vbc: float,
    forward: float,
    g_forward: float,
    reverse: float,
    g_reverse: float,
    qb: float,
    qb_by_vbe: float,
    qb_by_vbc: float,
    bf: float,
    br: float,
    ise_amps: float,
    ne_vt: float,
    isc_amps: float,
    nc_vt: float,
) -> tuple[float, float, float, float, float, float]:
    """Return (ic, ib, dic/dvbe, dic/dvbc, dib/dvbe, dib/dvbc) from what `transport` found."""
    leak_e = 0.0
    g_leak_e = 0.0
    if ise_amps != 0.0:
        leak_e, g_leak_e = junction_current(vbe, ise_amps, ne_vt)
    leak_c = 0.0
    g_leak_c = 0.0
    if isc_amps != 0.0:
        leak_c, g_leak_c = junction_current(vbc, isc_amps, nc_vt)
    per_qb = 1.0 / qb
    across = (forward - reverse) * per_qb
    into_base_c = reverse / br + leak_c
    g_base_c = g_reverse / br + g_leak_c
    return (
        across - into_base_c,
        forward / bf + leak_e + into_base_c,
        (g_forward - across * qb_by_vbe) * per_qb,
        (-g_reverse - across * qb_by_vbc) * per_qb - g_base_c,
        g_forward / bf + g_leak_e,
        g_base_c,
    )


def diffusion_charges(
    vbe: float,
    forward: float,
    g_forward: float,
    reverse: float,
    g_reverse: float,
    qb: float,
    qb_by_vbe: float,
    qb_by_vbc: float,
    tf_s: float,
    tr_s: float,
) -> tuple[float, float, float, float, float]:
    """Return (qbe, qbc, dqbe/dvbe, dqbe/dvbc, dqbc/dvbc) of the charge in transit, from what `transport` found.

    The forward charge is TF If / qb while the junction is forward biased, so qbe depends a little on vbc.
    """
    if vbe <= 0.0:
        return tf_s * forward, tr_s * reverse, tf_s * g_forward, 0.0, tr_s * g_reverse
    per_qb = 1.0 / qb
    carried = forward * per_qb
    return (
        tf_s * carried,
        tr_s * reverse,
        tf_s * (g_forward - carried * qb_by_vbe) * per_qb,
        -tf_s * carried * qb_by_vbc * per_qb,
        tr_s * g_reverse,
    )


def bjt_currents(
    vbe: float,
    vbc: float,
    is_amps: float,
    nf_vt: float,
    nr_vt: float,
    inverse_vaf: float,
    inverse_var: float,
    inverse_ikf: float,
    inverse_ikr: float,
    bf: float,
    br: float,
    ise_amps: float,
    ne_vt: float,
    isc_amps: float,
    nc_vt: float,
) -> tuple[float, float, float, float, float, float]:
    """Return (ic, ib, dic/dvbe, dic/dvbc, dib/dvbe, dib/dvbc) of a Gummel-Poon transistor.

    Currents flow into collector and base and hang on the two port voltages alone. The parameters after `vbc`
    come in the order of `bjt_values`.
    """
    shared = transport(vbe, vbc, is_amps, nf_vt, nr_vt, inverse_vaf, inverse_var, inverse_ikf, inverse_ikr)
    return terminal_currents(vbe, vbc, *shared, bf, br, ise_amps, ne_vt, isc_amps, nc_vt)


def bjt_charges(
    vbe: float,
    vbc: float,
    is_amps: float,
    nf_vt: float,
    nr_vt: float,
    inverse_vaf: float,
    inverse_var: float,
    inverse_ikf: float,
    inverse_ikr: float,
    cje_farads: float,
    vje_volts: float,
    mje: float,
    cjc_farads: float,
    vjc_volts: float,
    mjc: float,
    fc: float,
    tf_s: float,
    tr_s: float,
) -> tuple[float, float, float, float, float]:
    """Return (qbe, qbc, dqbe/dvbe, dqbe/dvbc, dqbc/dvbc) in coulombs and farads, depletion and diffusion.

    The parameters after `vbc` come in the order of `bjt_charge_values`.
    """
    depleted_be, c_be = depletion_charge(vbe, cje_farads, vje_volts, mje, fc)
    depleted_bc, c_bc = depletion_charge(vbc, cjc_farads, vjc_volts, mjc, fc)
    shared = transport(vbe, vbc, is_amps, nf_vt, nr_vt, inverse_vaf, inverse_var, inverse_ikf, inverse_ikr)
    qbe, qbc, cbe, cross, cbc = diffusion_charges(vbe, *shared, tf_s, tr_s)
    return depleted_be + qbe, depleted_bc + qbc, c_be + cbe, cross, c_bc + cbc


def diode_values(law: DiodeLaw) -> tuple[float, float]:
    """Return (is_amps, n * vt) in the order that `junction_current` takes."""
    return law.is_amps, law.n * law.vt_volts


def diode_charge_values(law: DiodeLaw) -> tuple[float, float, float, float, float, float, float]:
    """Return the parameters of `diode_charge` in its order."""
    charge = law.charge
    return (
        law.is_amps,
        law.n * law.vt_volts,
        charge.cj_farads,
        charge.vj_volts,
        charge.m,
        charge.fc,
        charge.tt_s,
    )


def bjt_values(law: BjtLaw) -> tuple[float, ...]:
    """Return the 13 parameters of `bjt_currents` in its order."""
    vt = law.vt_volts
    return (
        *_transport_values(law),
        law.bf,
        law.br,
        law.ise_amps,
        law.ne * vt,
        law.isc_amps,
        law.nc * vt,
    )


def bjt_charge_values(law: BjtLaw) -> tuple[float, ...]:
    """Return the 16 parameters of `bjt_charges` in its order."""
    return (
        *_transport_values(law),
        law.be.cj_farads,
        law.be.vj_volts,
        law.be.m,
        law.bc.cj_farads,
        law.bc.vj_volts,
        law.bc.m,
        law.be.fc,
        law.be.tt_s,
        law.bc.tt_s,
    )


def _transport_values(law: BjtLaw) -> tuple[float, ...]:
    return (
        law.is_amps,
        law.nf * law.vt_volts,
        law.nr * law.vt_volts,
        1.0 / law.vaf_volts,
        1.0 / law.var_volts,
        1.0 / law.ikf_amps,
        1.0 / law.ikr_amps,
    )
