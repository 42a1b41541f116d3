"""Bands of deviation and their colours."""

import itertools

import numpy as np
import pytest

from converter.jobs.comparison import Limits
from converter.maps.bands import NEAR, bands_for, round_step

# Machado, Oliveira, Fernandes, "A physiologically-based model for simulation of color vision deficiency", IEEE
# Transactions on Visualization and Computer Graphics 15 (2009), severity 1.0, on linear RGB (values from memory)
DEFICIENCIES = {
    "protanopia": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deuteranopia": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritanopia": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}
SETS = ("colour", "light", "dark")


def linear(colour):
    value = np.array([int(colour[k : k + 2], 16) for k in (1, 3, 5)]) / 255.0
    return np.where(value <= 0.04045, value / 12.92, ((value + 0.055) / 1.055) ** 2.4)  # IEC 61966-2-1


def lab(rgb):
    """CIE 1976 L*a*b* of linear sRGB under D65 (CIE 15)."""
    matrix = [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
    ratio = np.array(matrix) @ np.clip(rgb, 0.0, 1.0) / [0.95047, 1.0, 1.08883]
    x, y, z = np.where(ratio > 216 / 24389, np.cbrt(ratio), (24389 / 27 * ratio + 16) / 116)
    return np.array([116 * y - 16, 500 * (x - y), 200 * (y - z)])


def contrast(colour, background):
    """Contrast ratio of WCAG 2.1."""
    high, low = sorted((float(linear(c) @ [0.2126, 0.7152, 0.0722]) + 0.05 for c in (colour, background)), reverse=True)
    return high / low


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
@pytest.mark.parametrize("which", SETS)
def test_bands_differ_to_people_with_a_colour_vision_deficiency(deficiency, which):
    seen = [lab(np.array(DEFICIENCIES[deficiency]) @ linear(getattr(b, which))) for b in bands_for(None, 1.0).bands]
    for (i, a), (j, b) in itertools.combinations(enumerate(seen), 2):
        least = 15.0 if (i < NEAR) != (j < NEAR) and NEAR not in (i, j) else 10.0  # sides, and steps of one side
        assert np.linalg.norm(a - b) > least, (i, j)


@pytest.mark.parametrize("which", SETS)
def test_the_amount_shows_in_grey(which):
    lightness = np.array([lab(linear(getattr(band, which)))[0] for band in bands_for(None, 1.0).bands])
    away = -1.0 if which != "dark" else 1.0
    for side in (lightness[NEAR:], lightness[NEAR::-1]):
        steps = away * np.diff(side)
        assert steps.min() > 0.0
        assert steps[1:].min() > 12.0  # from within to out, and from out to far


def test_the_side_shows_in_grey():
    assert [band.dashed for band in bands_for(None, 1.0).bands] == [True, True, True, False, False, False, False]


@pytest.mark.parametrize("band", bands_for(None, 1.0).bands, ids=lambda band: band.key)
def test_lines_stand_out_from_their_page(band):
    assert contrast(band.light, "#ffffff") >= 3.0  # WCAG 2.1, 1.4.11 non-text contrast
    assert contrast(band.dark, "#15191d") >= 3.0


def test_out_of_tolerance_stands_out_on_paper_and_on_a_black_screen():
    for band in bands_for(None, 1.0).bands:
        if abs(band.side) and band.weight >= 3:
            assert min(contrast(band.colour, "#ffffff"), contrast(band.colour, "#000000")) >= 3.0


def test_index_colours_are_the_nearest():
    from ezdxf.colors import DXF_DEFAULT_COLORS, int2rgb

    table = np.array(
        [lab(linear("#{:02x}{:02x}{:02x}".format(*int2rgb(DXF_DEFAULT_COLORS[i])))) for i in range(1, 256)]
    )
    for band in bands_for(None, 1.0).bands:
        away = np.linalg.norm(table - lab(linear(band.colour)), axis=1)
        assert away[band.index_colour - 1] == away.min()


def test_bands_follow_limits_that_differ_by_side():
    bands = bands_for(Limits(0.3, 0.1, "profile zone"), 5.0, " mm")
    np.testing.assert_allclose(bands.edges(), [-0.2, -0.1, -0.05, 0.15, 0.3, 0.6])
    deviation = np.array([-9.0, -0.2, -0.11, -0.1, -0.05, 0.0, 0.15, 0.1500001, 0.3, 0.31, 0.6, 0.7])
    assert bands.index(deviation).tolist() == [0, 1, 1, 2, 3, 3, 3, 4, 4, 5, 5, 6]
    out = np.array([bands.bands[k].out for k in bands.index(deviation)])
    np.testing.assert_array_equal(out, (deviation > 0.3) | (deviation < -0.1))
    assert bands.bands[5].meaning == "+0.3 to +0.6 mm, out of tolerance"
    assert bands.bands[2].meaning == "-0.05 to -0.1 mm, within"
    assert bands.bands[3].meaning == "-0.05 to +0.15 mm, within"


@pytest.mark.parametrize("largest", [1e-9, 0.02, 0.0999, 0.4, 7.0, 123456.0])
def test_without_limits_steps_are_round_and_reach_the_largest(largest):
    bands = bands_for(None, largest)
    assert bands.plus[0] in {float(f"{d}e{e}") for d in (1, 2, 5) for e in range(-12, 8)}
    assert 4.0 * bands.plus[0] >= largest * (1 - 1e-9) > 1.5 * bands.plus[0]
    assert all(band.out is None for band in bands.bands)
    assert not bands.judged


def test_identical_revisions_have_bands():
    assert bands_for(None, 0.0).index(np.zeros(2)).tolist() == [NEAR, NEAR]


@pytest.mark.parametrize(
    ("least", "step"), [(1.0, 1.0), (1.01, 2.0), (2.5, 5.0), (0.051, 0.1), (0.05, 0.05), (7e5, 1e6)]
)
def test_round_steps(least, step):
    assert round_step(least) == step
