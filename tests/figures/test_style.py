"""Palette, thinning and repeatable bytes."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.figures import style

# sRGB to XYZ under D65: IEC 61966-2-1; CIELAB: CIE 15.
TO_XYZ = np.array([[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]])
WHITE = np.array([0.95047, 1.0, 1.08883])
# Dichromats at full severity: Machado, Oliveira & Fernandes (2009), IEEE Trans. Vis. Comput. Graph. 15(6), table of
# matrices on linear RGB (from memory; each row must sum to one).
DICHROMATS = {
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}


def linear(rgb):
    return np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)


def lab(light):
    ratio = light @ TO_XYZ.T / WHITE
    f = np.where(ratio > (6 / 29) ** 3, np.cbrt(ratio), ratio / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.stack([116 * f[:, 1] - 16, 500 * (f[:, 0] - f[:, 1]), 200 * (f[:, 1] - f[:, 2])], axis=1)


RGB = np.asarray(style.RAMP.colors)


def test_ramp_darkens_steadily_in_grey():
    lightness = lab(linear(RGB))[:, 0]
    assert (np.diff(lightness) < -0.1).all()
    assert lightness[0] - lightness[-1] > 45  # nine levels stay more than five units of L* apart
    assert lightness[-1] > 35  # dark marks still stand on the darkest colour


def test_ramp_is_even_and_inside_srgb():
    steps = np.linalg.norm(np.diff(lab(linear(RGB)), axis=0), axis=1)
    assert steps.max() / steps.min() < 1.5
    assert RGB.min() > 0
    assert RGB.max() < 1


@pytest.mark.parametrize("kind", DICHROMATS)
def test_ramp_survives_colour_blindness(kind):
    matrix = np.array(DICHROMATS[kind])
    np.testing.assert_allclose(matrix.sum(axis=1), 1.0, atol=1e-5)
    seen = lab(np.clip(linear(RGB[np.linspace(0, 255, 9).astype(int)]) @ matrix.T, 0, 1))
    assert (np.diff(seen[:, 0]) < -2).all()
    assert np.linalg.norm(np.diff(seen, axis=0), axis=1).min() > 5


def test_bars_over_and_under_the_limit_differ_in_luminance_of_ink():
    ink, paper = (lab(linear(np.array([[int(c[k:k + 2], 16) / 255 for k in (1, 3, 5)]])))[0, 0]
                  for c in (style.INK, style.PAPER))
    assert paper - ink > 80


def test_pictures_ignore_and_leave_user_settings():
    import matplotlib

    def draw():
        figure = style.figure(2, 1)
        figure.text(0.1, 0.5, "$a_b$")
        return figure

    with matplotlib.rc_context({"font.size": 30, "svg.fonttype": "path"}):
        loud = style.pictures("a", draw)
        assert matplotlib.rcParams["font.size"] == 30
    assert loud == style.pictures("a", draw)
    assert set(loud) == {"a.png", "a.svg"}
    assert b">$a_b$<" in loud["a.svg"]
