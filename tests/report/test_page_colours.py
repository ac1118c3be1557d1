"""The colours of the page: contrast in light and dark, and whether people with colour blindness tell formats apart."""

from __future__ import annotations

import re
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.report import palette

THEMES = {"light": palette.LIGHT, "dark": palette.DARK}
STYLE = Path(palette.__file__).parent / "templates" / "page.css"

# Machado, Oliveira and Fernandes, "A physiologically-based model for simulation of color vision deficiency", IEEE
# Transactions on Visualization and Computer Graphics 15(6), 2009, doi 10.1109/TVCG.2009.113; the matrices of severity 1
# on linear sRGB, recalled from memory.
BLINDNESS = {
    "none": np.eye(3),
    "protanopia": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deuteranopia": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritanopia": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}
# Distances in CIELAB (CIE 1976); about 2.3 is what an eye just tells apart (Mahy, Van Eycken and Oosterlinck, Color
# Research and Application 19(2), 1994; recalled from memory). Lines on a page lie apart, so four times that is asked.
APART = 4 * 2.3


def linear(colour):
    """Linear sRGB of a colour such as #1b2125 (IEC 61966-2-1)."""
    parts = np.array([int(colour[at : at + 2], 16) for at in (1, 3, 5)]) / 255.0
    return np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)


def contrast(one, other):
    """The contrast ratio of WCAG 2.2: (L1 + 0.05) / (L2 + 0.05) of relative luminances."""
    light, dark = sorted((float(linear(c) @ (0.2126, 0.7152, 0.0722)) for c in (one, other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def lab(rgb):
    """CIELAB under D65 of linear sRGB."""
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
    xyz = to_xyz @ np.clip(rgb, 0.0, 1.0) / (to_xyz @ np.ones(3))
    f = np.where(xyz > (6 / 29) ** 3, np.cbrt(xyz), xyz / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def test_the_ratio_is_that_of_the_standard():
    """Black on white has 21, and #767676 on white just reaches 4.5 (WCAG's own examples, recalled from memory)."""
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast("#777777", "#ffffff") < 4.5 < contrast("#767676", "#ffffff")


@pytest.mark.parametrize("theme", THEMES)
@pytest.mark.parametrize("ground", palette.GROUNDS)
def test_text_can_be_read(theme, ground):
    """All text, names of formats in drawings among it, has a contrast of 4.5 to what it stands on."""
    colours = THEMES[theme]
    low = {role: contrast(colours[role], colours[ground]) for role in (*palette.TEXTS, *palette.SERIES)}
    assert {role: ratio for role, ratio in low.items() if ratio < 4.5} == {}


@pytest.mark.parametrize("theme", THEMES)
def test_text_on_a_mark_can_be_read(theme):
    """The number of a level that pays stands in the colour of the paper on that of the mark."""
    assert contrast(THEMES[theme]["paper"], THEMES[theme]["yes"]) >= 4.5


@pytest.mark.parametrize("theme", THEMES)
@pytest.mark.parametrize("blindness", BLINDNESS)
def test_formats_are_told_apart_by_everybody(theme, blindness):
    """No two formats, nor the signal, become one colour under any kind of colour blindness."""
    seen = {
        role: lab(np.asarray(BLINDNESS[blindness]) @ linear(THEMES[theme][role])) for role in (*palette.SERIES, "ink")
    }
    near = {
        pair: float(np.linalg.norm(seen[pair[0]] - seen[pair[1]]))
        for pair in combinations(seen, 2)
        if np.linalg.norm(seen[pair[0]] - seen[pair[1]]) < APART
    }
    assert near == {}


def test_formats_are_told_apart_without_colour():
    """Each narrow format has a marker and dashes that no other has, and a colour of its own."""
    looks = [palette.look_of(name) for name in FORMATS if name != "float64"]
    for part in ("role", "marker", "dash"):
        assert len({getattr(look, part) for look in looks}) == len(looks)


def test_both_themes_have_the_same_roles():
    """A colour that one theme lacks would be lost in it."""
    assert list(palette.LIGHT) == list(palette.DARK)
    assert {*palette.GROUNDS, *palette.TEXTS, *palette.SERIES} <= set(palette.LIGHT)


def test_the_page_has_no_other_colours():
    """The style sheet takes every colour from the palette, so that what is checked here is what is seen."""
    text = STYLE.read_text(encoding="utf-8")
    named = r"(?<![\w-])(?:black|white|red|green|blue|gr[ae]y|orange|purple)(?![\w-])"
    assert re.findall(rf"#[0-9a-fA-F]{{3,8}}\b|rgba?\(|hsla?\(|oklch\(|{named}", text) == []
    assert set(re.findall(r"var\(--([a-z0-9-]+)\)", text)) <= set(palette.LIGHT)
