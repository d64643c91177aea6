"""The colours of pages and figures.

Two hues that differ in lightness too, so that grey prints and all eyes tell them apart; colour repeats what a symbol,
a word or a line style says already.
"""

from __future__ import annotations

__all__ = ["DARK", "LIGHT", "contrast", "figure_style", "variables"]

LIGHT = {
    "paper": "#fbfaf6",
    "card": "#ffffff",
    "ink": "#20262e",
    "soft": "#535d69",
    "line": "#7d8792",
    "hair": "#dedbd2",
    "main": "#1f5f7a",
    "wash": "#d3e4ea",
    "mark": "#a4480c",
    "glow": "#f7e3d3",
}
DARK = {
    "paper": "#14181d",
    "card": "#1b2027",
    "ink": "#e9e6df",
    "soft": "#b2b8c0",
    "line": "#848e9a",
    "hair": "#343b45",
    "main": "#86c5de",
    "wash": "#234250",
    "mark": "#f0a368",
    "glow": "#44301f",
}
"""Roles: paper and card behind everything, ink and soft for text, line and hair for rules; main for what was adjusted,
mark for what is suspected, wash and glow the pale areas of each."""

_FONT = "'Source Sans 3', 'Segoe UI', 'Helvetica Neue', Arial, 'Liberation Sans', 'DejaVu Sans', sans-serif"


def variables(colours: dict[str, str]) -> str:
    """Return the colours as variables of a style sheet."""
    return "".join(f"--{role}:{value};" for role, value in colours.items())


def figure_style(colours: dict[str, str] | None = None) -> str:
    """Return the style of figures: with these colours, or with the variables of the page around them."""
    rules = [f".figure-of-flows text{{font-family:{_FONT};font-variant-numeric:tabular-nums}}"]
    for role in LIGHT:
        value = colours[role] if colours else f"var(--{role})"
        rules.append(f".f-{role}{{fill:{value}}}.s-{role}{{stroke:{value};fill:none}}")
    halo = colours["card"] if colours else "var(--card)"
    rules.append(f".halo{{paint-order:stroke;stroke:{halo};stroke-width:3px;stroke-linejoin:round}}")
    return "".join(rules)


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours ``#rrggbb`` as WCAG 2.2 defines it."""
    light, dark = sorted((_luminance(one), _luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def _luminance(colour: str) -> float:
    out = 0.0
    for weight, at in ((0.2126, 1), (0.7152, 3), (0.0722, 5)):
        c = int(colour[at : at + 2], 16) / 255
        out += weight * (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4)
    return out
