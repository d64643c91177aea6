"""The audit of the sigmas, in words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..diagnose.audit import LEAST_SHARE, LEAST_SNAPSHOTS
from .layout import wrap

if TYPE_CHECKING:
    from ..history import History
    from ..over_time.sigmas import SigmaAudit, SigmaFactor

__all__ = ["audit_in_words", "audit_sentences"]

HALF = 0.5
ABOUT = {
    "zero": "",
    "mean": " (about their mean, since something steady shows)",
    "pairs": " (from one to the next, since something changes)",
}


def audit_in_words(history: History) -> list[str]:
    """Lines on the sigmas."""
    return ["  Sigmas", *(wrap(s, "    ") for s in audit_sentences(history))]


def audit_sentences(history: History) -> list[str]:
    """Whether the sigmas are what the readings scatter by; nothing is said from fewer than twenty snapshots."""
    n = history.count
    if n < LEAST_SNAPSHOTS:
        have = "1 snapshot says" if n == 1 else f"{n} snapshots say"
        return [f"Not auditable: {have} too little of a sigma, {LEAST_SNAPSHOTS} are needed."]
    a = history.audit
    band = f"mean χ² per check {a.ratio:.2f}, 95 % band {a.low:.2f} to {a.high:.2f}"
    if history.result.settings.level != 0.05:
        band = band.replace("95 %", f"{100 * (1 - history.result.settings.level):g} %")
    scatter = f"Over {n} snapshots{ABOUT[a.about]} the readings scatter"
    out = []
    if a.status == "structural":
        why = (
            "Not auditable while a balance is off to the same side in every record: what is missing there scatters, too"
        )
        return [f"{why} ({band})."]
    if a.status == "few snapshots":
        out.append(
            f"{scatter} other than their sigmas let expect ({band}), but only because of {', '.join(a.hangs_on)}: without, "
            "no change is indicated."
        )
    elif a.status == "no change":
        out.append(f"{scatter} as their sigmas let expect ({band}): no change indicated.")
    elif a.status == "one":
        out.append(_one(a.meter(a.named[0]), n, a.about, band))
    elif a.status == "rivals":
        told = ", or ".join(f"{t} by a factor {_factor(a.meter(t))}" for t in a.named)
        out.append(f"{scatter} other than their sigmas let expect ({band}). Cannot tell which sigma is wrong: {told}.")
    else:
        more = "more" if a.ratio > a.high else "less"
        out.append(
            f"{scatter} {more} than their sigmas let expect ({band}), and no one reading stands out: all sigmas together "
            f"would have to change by a factor {a.overall:.2f} ({a.overall_low:.2f} to {a.overall_high:.2f})."
        )
    if a.together:
        told = ", ".join(f"{t} {f:.2f} ± {s:.2f}" for t, f, s in a.together)
        out.append(f"One is not enough: changed together, the factors are {told}.")
    out += _too_good(a, history)
    out += _silent(a)
    return out


def _factor(m: SigmaFactor) -> str:
    high = f"{m.high:.1f}" if math.isfinite(m.high) else "more"
    return f"{m.factor:.1f} (95 %: {m.low:.1f} to {high})"


def _one(m: SigmaFactor, n: int, about: str, band: str) -> str:
    text = (
        f"Over {n} snapshots{ABOUT[about]} the readings scatter other than their sigmas let expect ({band}): {m.tag} by "
        f"{_factor(m)} times what its sigma allows. No other reading explains it as well."
    )
    if m.high < 1:
        text += " That sigma is too large."
        if m.low <= HALF <= m.high:
            text += " Was it taken from a certificate as expanded uncertainty, with k = 2?"
    return text


def _too_good(a: SigmaAudit, history: History) -> list[str]:
    if not a.too_good and a.ratio >= a.low:
        return []
    out = []
    if a.overall_high < 1:
        guess = " Were they certificate values with k = 2?" if a.overall_low <= HALF <= a.overall_high else ""
        out.append(
            f"χ² is far below what {history.count} snapshots should give: sigmas look about {1 / a.overall:.1f} times too "
            f"large.{guess}"
        )
    out.append(
        "Readings agree better than their sigmas allow. Are some computed from others (copied, back-calculated)?"
    )
    if history.result.model.shared:
        out.append(
            "Errors that meters share are part of those sigmas; where they stay the same over the snapshots they do not "
            "scatter, and the sigmas look too large for that reason alone."
        )
    return out


def _silent(a: SigmaAudit) -> list[str]:
    out = []
    weak = [m for m in a.meters if m.reason == "share"]
    if weak:
        told = ", ".join(f"{m.tag} (share checked {m.share:.2f})" for m in weak)
        out.append(f"Not auditable: {told}; below {LEAST_SHARE:g} a sigma hardly shows in the scatter.")
    seldom = [m.tag for m in a.meters if m.reason == "few"]
    if seldom:
        out.append(f"Not auditable: {', '.join(seldom)}; checked in fewer than {LEAST_SNAPSHOTS} snapshots.")
    done: set[str] = set()
    for m in a.meters:
        if m.reason == "tied" and m.tag not in done:
            members = [m.tag, *m.tied_with]
            done.update(members)
            out.append(f"Not auditable one by one: {', '.join(members)}; only the sum of their variances shows.")
    return out
