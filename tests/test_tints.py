"""Tints told apart by eyes of three kinds, and states told apart without any tint."""

import itertools

import numpy as np
import pytest

from meshctl.screens.tints import GROUND, LIGHT, STEPS, TINTS, Looks, light_colour

# what the rarer kinds of eye see, linear RGB: Machado, Oliveira and Fernandes 2009, severity 1.0
VISION = {
    "usual": np.eye(3),
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}
# linear sRGB to XYZ with its white: IEC 61966-2-1
XYZ = np.array(
    [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
)
WHITE = np.array([0.95047, 1.0, 1.08883])


def linear(colour):
    c = np.asarray(colour) / 255.0
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)


def lab(colour, vision):
    x = XYZ @ np.clip(np.asarray(VISION[vision]) @ linear(colour), 0.0, 1.0) / WHITE
    f = np.where(x > 216 / 24389, np.cbrt(x), (24389 / 27 * x + 16) / 116)  # CIE 1976
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def contrast(a, b):
    low, high = sorted(linear(c) @ XYZ[1] for c in (a, b))
    return (high + 0.05) / (low + 0.05)  # WCAG 2


@pytest.mark.parametrize("vision", VISION)
def test_tints_lie_apart_for_every_eye(vision):
    for (one, a), (other, b) in itertools.combinations(TINTS.items(), 2):
        assert np.linalg.norm(lab(a, vision) - lab(b, vision)) >= 20.0, (one, other)


def test_all_text_stands_out_from_ground():
    ramp = [light_colour(step) for step in range(STEPS)]
    for colour in (*TINTS.values(), *LIGHT, *ramp):
        assert contrast(colour, GROUND) >= 4.5, colour


def test_more_light_is_always_brighter():
    lightness = [lab(light_colour(step), "usual")[0] for step in range(STEPS)]
    assert (np.diff(lightness) > 1.0).all()


def test_looks_without_colour_hold_none():
    for style in Looks(False).list:
        assert style.color is None
        assert style.bgcolor is None


def test_selection_differs_in_both_looks():
    for coloured in (True, False):
        looks = Looks(coloured).list
        half = len(looks) // 2
        assert all(looks[k] != looks[half + k] for k in range(half))
