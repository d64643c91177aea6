"""Contrast of the palette, by the formula of WCAG 2.2, and lightness in grey print."""

from __future__ import annotations

import pytest

from reconcile.report.palette import DARK, LIGHT, _luminance, contrast


def test_formula_at_points_that_wcag_states():
    # WCAG 2.2, definition of contrast ratio: from 1 to 21.
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast("#777777", "#777777") == pytest.approx(1.0)
    # Grey #767676 is the darkest-on-white example of 4.54:1 in the Understanding document of 1.4.3 (from memory).
    assert contrast("#767676", "#ffffff") == pytest.approx(4.54, abs=0.005)


TEXT_ON = [
    *((role, behind) for role in ("ink", "mark") for behind in ("paper", "card", "wash", "glow")),
    *((role, behind) for role in ("soft", "main") for behind in ("paper", "card")),
    ("soft", "glow"),
]
"""Where the pages and figures put text."""


@pytest.mark.parametrize("colours", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize(("role", "behind"), TEXT_ON)
def test_text_stands_out(colours, role, behind):
    assert contrast(colours[role], colours[behind]) >= 4.5


@pytest.mark.parametrize("colours", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("role", ["ink", "line", "main", "mark"])
@pytest.mark.parametrize("behind", ["paper", "card"])
def test_lines_and_bars_stand_out(colours, role, behind):
    assert contrast(colours[role], colours[behind]) >= 3.0


@pytest.mark.parametrize("colours", [LIGHT, DARK], ids=["light", "dark"])
def test_areas_differ_from_what_is_drawn_on_them_in_grey_too(colours):
    for area in ("wash", "glow"):
        for role in ("main", "mark", "ink"):
            light, dark = sorted((_luminance(colours[area]), _luminance(colours[role])))
            assert (dark + 0.05) / (light + 0.05) >= 3.0


def test_both_modes_have_the_same_roles():
    assert set(LIGHT) == set(DARK)
