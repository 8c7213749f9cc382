"""The colours, measured: contrast, and distance for colour-blind readers."""

from itertools import combinations

import numpy as np
import pytest

from leakpipe.report.palette import PALETTE, themed, variables

GRAPHICS = 3.0
"""Least contrast of a graphical object: W3C, Web Content Accessibility Guidelines 2.1, 1.4.11."""

TEXT = 4.5
"""Least contrast of normal text: the same guidelines, 1.4.3."""

APART = 20.0
"""Least CIE 1976 colour difference between two categories. A just noticeable difference is about
2.3; ten times that is our choice for small marks."""

MARKS = ("data", "measure", "third")

# Machado, Oliveira and Fernandes, IEEE Trans. Vis. Comput. Graph. 15, 1291 (2009), severity 1.0, on
# linear RGB. Recalled from memory; that each row sums to one is checked below.
BLINDNESS = {
    "none": np.eye(3),
    "protanopia": np.array(
        [
            [0.152286, 1.052583, -0.204868],
            [0.114503, 0.786281, 0.099216],
            [-0.003882, -0.048116, 1.051998],
        ]
    ),
    "deuteranopia": np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.011820, 0.042940, 0.968881],
        ]
    ),
    "tritanopia": np.array(
        [
            [1.255528, -0.076749, -0.178779],
            [-0.078411, 0.930809, 0.147602],
            [0.004733, 0.691367, 0.303900],
        ]
    ),
}


def linear(colour):
    """Return linear RGB of a hex colour (IEC 61966-2-1)."""
    parts = np.array([int(colour[place : place + 2], 16) for place in (1, 3, 5)]) / 255
    return np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)


def contrast(one, other):
    """Return the contrast ratio of two colours (the guidelines' formula)."""
    light, dark = sorted((linear(c) @ [0.2126, 0.7152, 0.0722] for c in (one, other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def lab(rgb):
    """Return CIE L*a*b* (D65) of linear RGB."""
    to_xyz = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    )
    share = to_xyz @ np.clip(rgb, 0, 1) / [0.9505, 1.0, 1.089]
    f = np.where(share > (6 / 29) ** 3, np.cbrt(share), share * (29 / 6) ** 2 / 3 + 4 / 29)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def test_known_contrasts():
    """The measuring rod itself: white on black is 21, and a colour on itself is 1."""
    assert contrast("#ffffff", "#000000") == pytest.approx(21.0)
    assert contrast("#1b5fab", "#1b5fab") == 1.0


def test_blindness_matrices_keep_grey():
    """Each row sums to one up to the six printed digits, so that grey stays grey."""
    for matrix in BLINDNESS.values():
        np.testing.assert_allclose(matrix.sum(axis=1), 1.0, atol=3 * 0.5e-6)


@pytest.mark.parametrize("side", ["light", "dark"])
def test_contrast(side):
    """Text and marks stand out from the surface in light and in dark."""
    surface = getattr(PALETTE["surface"], side)
    for name in ("ink", "quiet", *MARKS):
        assert contrast(getattr(PALETTE[name], side), surface) >= TEXT, name
    for name in MARKS:
        assert contrast(getattr(PALETTE[name], side), surface) >= GRAPHICS, name


@pytest.mark.parametrize("side", ["light", "dark"])
@pytest.mark.parametrize("kind", list(BLINDNESS))
def test_categories_stay_apart(side, kind):
    """Readers with any of the three kinds of colour blindness can tell the categories apart."""
    for one, other in combinations(MARKS, 2):
        seen = [lab(BLINDNESS[kind] @ linear(getattr(PALETTE[n], side))) for n in (one, other)]
        assert np.linalg.norm(seen[0] - seen[1]) >= APART, (one, other)


def test_red_against_green_fails_the_same_test():
    """Negative control: a red and a green of like lightness come out too close for deuteranopia."""
    seen = [lab(BLINDNESS["deuteranopia"] @ linear(c)) for c in ("#c0392b", "#5b7f1f")]
    assert np.linalg.norm(seen[0] - seen[1]) < APART


def test_themed_replaces_palette_colours_only():
    """Palette colours become variables that fall back to themselves; others stay."""
    light = PALETTE["data"].light
    assert themed(f"fill: {light}; stroke: #123456") == (
        f"fill: var(--data, {light}); stroke: #123456"
    )
    assert PALETTE["data"].dark in variables(dark=True)
    assert PALETTE["data"].light in variables(dark=False)
