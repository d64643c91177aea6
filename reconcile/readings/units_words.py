"""Tells a row of units from a row of readings, without a library of units.

Only recognises; what a unit means is decided where the case is read.
"""

from __future__ import annotations

import re

from .cells import clean

__all__ = ["looks_like_unit", "split_header_unit"]

_ATOMS = frozenset(
    """
    - 1 % ‰ ppm ppb ppmv ppbv g kg mg ug µg μg ng t ton tonne lb oz mol mmol umol µmol μmol nmol kmol cmol cmmol eq meq
    l ml ul µl μl dl hl cl m cm mm km in ft um µm μm nm m2 m3 cm3 dm3 mm3 cm2 mm2 km3 ft3 in3 gal bbl nl sl nm3 sm3
    nml scm sccm slpm slm nlpm lpm gpm cfm scfm nm3/h s sec min h hr hour hours d day days wk week month yr year ms us
    µs μs a ma ua µa μa ka ah mah kah v mv kv uv µv w kw mw gw kwh mwh wh gwh j kj mj gj cal kcal btu mmbtu hp va kva
    var kvar pa kpa mpa hpa bar mbar barg bara psi psig psia atm torr mmhg cmh2o mmh2o inh2o k c °c degc f °f degf °k
    ohm Ω kohm mohm s/m ms/cm us/cm µs/cm μs/cm hz khz mhz rpm n kn nn mn wt wt% vol% vol mol% w% v% m% frac fraction
    percent ph pt cmol cp pas mpas st cst deg rad lb/h klb count counts pulse pulses c-mmol c-mol iu u od rh %rh
    """.split()  # noqa: SIM905 - a page of words reads better than a list of literals
)
_SPLIT = re.compile(r"[/*·.\s()\[\]^]+|(?<=[A-Za-z])(?=[-+]?\d)|[²³⁻¹]+")
_BRACKET = re.compile(r"^(?P<tag>.*\S)\s*[\[(](?P<unit>[^\[\]()]*)[\])]$")


def looks_like_unit(text: str) -> bool:
    """Return True for text that reads as a unit: ``kg/h``, ``[m3 h-1]``, ``wt%``, ``°C``."""
    word = clean(text)
    if len(word) > 1 and word[0] in "[(" and word[-1] in "])":
        word = word[1:-1].strip()
    if not word or len(word) > 24:
        return False
    folded = word.casefold()
    if folded in _ATOMS:
        return True
    parts = [p for p in _SPLIT.split(folded) if p and not re.fullmatch(r"[-+]?\d+", p)]
    return bool(parts) and all(p in _ATOMS for p in parts)


def split_header_unit(header: str) -> tuple[str, str] | None:
    """Return (tag, unit) of a header such as ``FT-1 [kg/h]``, or None when it has no unit in brackets."""
    found = _BRACKET.match(header)
    if found is None or not looks_like_unit(found.group("unit")):
        return None
    return found.group("tag").strip(), found.group("unit").strip()
