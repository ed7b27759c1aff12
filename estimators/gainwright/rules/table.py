"""The table of published tuning rules. Adding a rule is adding one row.

Owns names, sources, coefficients and ranges. What margins a rule leaves is for `margins`, which to recommend for the
service. ``kappa = 1/(K Ku)``, the gain at the crossover over the static gain.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

from gainwright.gains import Gains
from gainwright.rules.from_model import (
    amigo_step,
    improved_simc_pi,
    improved_simc_pid,
    internal_model,
    lambda_pi,
    skogestad,
    ziegler_nichols_step,
)
from gainwright.rules.rule import Kind, Knowledge, Needs, Rule
from gainwright.rules.ultimate import amigo_frequency, fractions, kappa_fit, moved_point

ANY = (0.0, math.inf)
# Rules of thumb of Astrom & Hagglund 1995 (from memory): poor below 0.1, and above 0.7 for all but PI.
ZN_P_PI, ZN_PID = (0.1, math.inf), (0.1, 0.7)
LAG_DOMINATED = (0.0, 0.5)
# The rule is meant for kappa above 0.2; below 0.1 its peak sensitivity can pass 60 (recomputed on the test batch).
AMIGO_FREQUENCY = (0.2, 1.0)
# Where the coefficients, which are from memory, were checked on ten plants.
KAPPA_TAU = (0.1, 0.55)

_BELOW = {
    ANY: "",
    ZN_P_PI: "1/(K Ku) of 0.1 or more (Astrom & Hagglund 1995, from memory)",
    ZN_PID: "1/(K Ku) of 0.1 to 0.7 (Astrom & Hagglund 1995, from memory)",
    LAG_DOMINATED: "1/(K Ku) of 0.5 or less: lag-dominated and integrating processes",
    AMIGO_FREQUENCY: "1/(K Ku) of 0.2 to 1 (Astrom & Hagglund 2006, from memory)",
    KAPPA_TAU: "1/(K Ku) of 0.1 to 0.55, where the coefficients were checked",
}


def _rule(
    name: str,
    kind: Kind,
    needs: Needs,
    source: str,
    function: Callable[[Knowledge], Gains],
    ratios: tuple[float, float] = ANY,
    validity: str = "",
) -> Rule:
    words = "; ".join(text for text in (validity, _BELOW[ratios]) if text)
    return Rule(name, kind, needs, words, source, *ratios, function)


_POINT, _BOTH, _MODEL = Needs.ULTIMATE_POINT, Needs.ULTIMATE_POINT_AND_STATIC_GAIN, Needs.MODEL
_SIMC = "Skogestad, J. Process Control 13:291-309, 2003; closed-loop time constant = effective dead time"
_TYREUS = "Tyreus & Luyben, Ind. Eng. Chem. Res. 31(11):2625-2628, 1992"
_LUYBEN = "Luyben & Luyben, Essentials of Process Control, McGraw-Hill, 1997"
_ZIEGLER = "Ziegler & Nichols, Trans. ASME 64:759-768, 1942"
_AH84 = "Astrom & Hagglund, Automatica 20(5):645-651, 1984"
_AH95 = "Astrom & Hagglund, PID Controllers: Theory, Design and Tuning, ISA 1995 (coefficients from memory)"
_AH04 = "Astrom & Hagglund, J. Process Control 14:635-650, 2004"
_AH06 = "Astrom & Hagglund, Advanced PID Control, ISA 2006, ch. 7 (coefficients from memory)"
_SEBORG = "Seborg, Edgar & Mellichamp, Process Dynamics and Control, 1st ed. 1989 (from memory)"
_IMC = "Rivera, Morari & Skogestad, Ind. Eng. Chem. Process Des. Dev. 25:252-265, 1986 (from memory)"
_LAG = "a lag and an effective dead time above 0"

RULES: tuple[Rule, ...] = (
    _rule("skogestad_2003", Kind.PI, _MODEL, _SIMC, skogestad(Kind.PI), validity=_LAG),
    _rule("skogestad_2003", Kind.PID, _MODEL, _SIMC, skogestad(Kind.PID), validity=f"{_LAG}, a second lag"),
    _rule("tyreus_luyben_1992", Kind.PI, _POINT, _TYREUS, fractions(1 / 3.2, 2.2), LAG_DOMINATED),
    _rule("luyben_luyben_1997", Kind.PID, _POINT, _LUYBEN, fractions(1 / 2.2, 2.2, 1 / 6.3), LAG_DOMINATED),
    _rule("ziegler_nichols_1942", Kind.P, _POINT, _ZIEGLER, fractions(0.5), ZN_P_PI),
    _rule("ziegler_nichols_1942", Kind.PI, _POINT, _ZIEGLER, fractions(0.45, 1 / 1.2), ZN_P_PI),
    _rule("ziegler_nichols_1942", Kind.PID, _POINT, _ZIEGLER, fractions(0.6, 1 / 2, 1 / 8), ZN_PID),
)
"""The rules that are proposed."""

_PI_TI = (0.90, -4.4, 2.7)

REFERENCE_RULES: tuple[Rule, ...] = (
    _rule(
        "grimholt_skogestad_2012",
        Kind.PI,
        _MODEL,
        "Grimholt & Skogestad, IFAC PID'12, 2012",
        improved_simc_pi,
        validity=_LAG,
    ),
    _rule(
        "grimholt_skogestad_2018",
        Kind.PID,
        _MODEL,
        "Grimholt & Skogestad, J. Process Control 70:36-46, 2018 (abstract only)",
        improved_simc_pid,
        validity=_LAG,
    ),
    _rule("rivera_morari_skogestad_1986", Kind.PI, _MODEL, _IMC, internal_model(Kind.PI), validity=_LAG),
    _rule("rivera_morari_skogestad_1986", Kind.PID, _MODEL, _IMC, internal_model(Kind.PID), validity=_LAG),
    _rule(
        "dahlin_1968",
        Kind.PI,
        _MODEL,
        "Dahlin, Instruments & Control Systems 41(6), 1968 (from memory); closed-loop time constant = lag",
        lambda_pi,
        validity=_LAG,
    ),
    _rule("astrom_hagglund_2004", Kind.PI, _MODEL, _AH04, amigo_step(Kind.PI), validity=_LAG),
    _rule("astrom_hagglund_2004", Kind.PID, _MODEL, _AH04, amigo_step(Kind.PID), validity=_LAG),
    _rule("astrom_hagglund_2006", Kind.PI, _BOTH, _AH06, amigo_frequency(Kind.PI), AMIGO_FREQUENCY),
    _rule("astrom_hagglund_2006", Kind.PID, _BOTH, _AH06, amigo_frequency(Kind.PID), AMIGO_FREQUENCY),
    _rule("astrom_hagglund_1995_ms_1.4", Kind.PI, _BOTH, _AH95, kappa_fit((0.053, 2.9, -2.6), _PI_TI), KAPPA_TAU),
    _rule("astrom_hagglund_1995_ms_2.0", Kind.PI, _BOTH, _AH95, kappa_fit((0.13, 1.9, -1.3), _PI_TI), KAPPA_TAU),
    _rule(
        "astrom_hagglund_1995_ms_1.4",
        Kind.PID,
        _BOTH,
        _AH95,
        kappa_fit((0.33, -0.31, -1.0), (0.76, -1.6, -0.36), (0.17, -0.46, -2.1)),
        KAPPA_TAU,
    ),
    _rule(
        "astrom_hagglund_1995_ms_2.0",
        Kind.PID,
        _BOTH,
        _AH95,
        kappa_fit((0.72, -1.6, 1.2), (0.59, -1.3, 0.38), (0.15, -1.4, 0.56)),
        KAPPA_TAU,
    ),
    _rule("astrom_hagglund_1984_phase_margin_45", Kind.PID, _POINT, _AH84, moved_point(1.0, 45.0), ZN_PID),
    _rule("astrom_hagglund_1984_amplitude_margin_2", Kind.PID, _POINT, _AH84, moved_point(0.5, 0.0), ZN_PID),
    _rule("astrom_hagglund_1995_moved_point", Kind.PID, _POINT, _AH95, moved_point(0.5, 20.0), ZN_PID),
    _rule(
        "pessen_1994",
        Kind.PID,
        _POINT,
        "Pessen, J. Dyn. Sys. Meas. Control, 1994 (from memory)",
        fractions(0.7, 0.4, 0.15),
        ZN_PID,
    ),
    _rule("seborg_1989_some_overshoot", Kind.PID, _POINT, _SEBORG, fractions(1 / 3, 1 / 2, 1 / 3), ZN_PID),
    _rule("seborg_1989_no_overshoot", Kind.PID, _POINT, _SEBORG, fractions(0.2, 1 / 2, 1 / 3), ZN_PID),
    _rule("ziegler_nichols_1942_step", Kind.PI, _MODEL, _ZIEGLER, ziegler_nichols_step(Kind.PI), ZN_P_PI, _LAG),
    _rule("ziegler_nichols_1942_step", Kind.PID, _MODEL, _ZIEGLER, ziegler_nichols_step(Kind.PID), ZN_PID, _LAG),
)
"""Further published rules, kept for comparison."""


def rules_by_name() -> Mapping[tuple[str, Kind], Rule]:
    """Every rule, proposed or for reference, under its name and kind."""
    return {(rule.name, rule.kind): rule for rule in (*RULES, *REFERENCE_RULES)}
