"""Colour conversions and differences against published values and an independent library."""

import colour as colour_science
import numpy as np
import pytest
from colour.blindness import CVD_MATRICES_MACHADO2010
from steadfield.algorithms.numeric import colour

# Sharma, Wu & Dalal (2005), Color Res. Appl. 30:21, table 1: two CIELAB colours and their
# CIEDE2000 difference. Copied from the tests of the library colour-science 0.4.6, which quote the
# table (pair 14 stands there as a comment).
PAIRS = """
50 2.6772 -79.7751      50 0 -82.7485           2.0425
50 3.1571 -77.2803      50 0 -82.7485           2.8615
50 2.8361 -74.0200      50 0 -82.7485           3.4412
50 -1.3802 -84.2814     50 0 -82.7485           1.0000
50 -1.1848 -84.8006     50 0 -82.7485           1.0000
50 -0.9009 -85.5211     50 0 -82.7485           1.0000
50 0 0                  50 -1 2                 2.3669
50 -1 2                 50 0 0                  2.3669
50 2.4900 -0.0010       50 -2.4900 0.0009       7.1792
50 2.4900 -0.0010       50 -2.4900 0.0010       7.1792
50 2.4900 -0.0010       50 -2.4900 0.0011       7.2195
50 2.4900 -0.0010       50 -2.4900 0.0012       7.2195
50 -0.0010 2.4900       50 0.0009 -2.4900       4.8045
50 -0.0010 2.4900       50 0.0010 -2.4900       4.8045
50 -0.0010 2.4900       50 0.0011 -2.4900       4.7461
50 2.5 0                50 0 -2.5               4.3065
50 2.5 0                73 25 -18               27.1492
50 2.5 0                61 -5 29                22.8977
50 2.5 0                56 -27 -3               31.9030
50 2.5 0                58 24 15                19.4535
50 2.5 0                50 3.1736 0.5854        1.0000
50 2.5 0                50 3.2972 0             1.0000
50 2.5 0                50 1.8634 0.5757        1.0000
50 2.5 0                50 3.2592 0.3350        1.0000
60.2574 -34.0099 36.2677  60.4626 -34.1751 39.4387  1.2644
63.0109 -31.0961 -5.8663  62.8187 -29.7946 -4.0864  1.2630
61.2901 3.7196 -5.3901    61.4292 2.2480 -4.9620    1.8731
35.0831 -44.1164 3.7933   35.0232 -40.0716 1.5901   1.8645
22.7233 20.0904 -46.6940  23.0331 14.9730 -42.5619  2.0373
36.4612 47.8580 18.3852   36.2715 50.5065 21.2231   1.4146
90.8027 -2.0831 1.4410    91.1528 -1.6435 0.0447    1.4441
90.9257 -0.5406 -0.9208   88.6381 -0.8985 -0.7239   1.5381
6.7747 -0.2908 -2.4247    5.8714 -0.0985 -2.2286    0.6377
2.0776 0.0795 -1.1350     0.9033 -0.0636 -0.5514    0.9082
"""
TABLE = np.array([line.split() for line in PAIRS.strip().splitlines()], float)
KINDS = {"protanopia": "Protanomaly", "deuteranopia": "Deuteranomaly", "tritanopia": "Tritanomaly"}


def random_srgb(count=500):
    return np.random.default_rng(20).uniform(0, 1, (count, 3))


def test_difference_meets_the_34_published_pairs_both_ways():
    assert TABLE.shape == (34, 7)
    for first, second in ((TABLE[:, :3], TABLE[:, 3:6]), (TABLE[:, 3:6], TABLE[:, :3])):
        np.testing.assert_allclose(colour.difference(first, second), TABLE[:, 6], atol=1e-4)


def test_difference_agrees_with_colour_science_on_random_colours():
    first, second = colour.srgb_to_cielab(random_srgb(1000)).reshape(2, 500, 3)
    expected = colour_science.difference.delta_E_CIE2000(first, second)
    np.testing.assert_allclose(colour.difference(first, second), expected, rtol=1e-9, atol=1e-9)


def test_srgb_curve_agrees_with_colour_science():
    srgb = random_srgb()
    expected = colour_science.models.eotf_sRGB(srgb)
    np.testing.assert_allclose(colour.srgb_to_linear(srgb), expected, atol=1e-12)
    np.testing.assert_allclose(
        colour.linear_to_srgb(srgb), colour_science.models.eotf_inverse_sRGB(srgb), atol=1e-12
    )


def test_cielab_agrees_with_colour_science():
    srgb = random_srgb()
    space = colour_science.RGB_COLOURSPACES["sRGB"]
    xyz = colour_science.models.eotf_sRGB(srgb) @ space.matrix_RGB_to_XYZ.T
    expected = colour_science.XYZ_to_Lab(xyz, space.whitepoint)
    # the library carries the rounded matrix of the standard
    np.testing.assert_allclose(colour.srgb_to_cielab(srgb), expected, atol=0.03)
    np.testing.assert_allclose(colour.srgb_to_cielab([1, 1, 1]), [100, 0, 0], atol=1e-9)


def test_oklab_agrees_with_colour_science():
    srgb = random_srgb()
    space = colour_science.RGB_COLOURSPACES["sRGB"]
    xyz = colour_science.models.eotf_sRGB(srgb) @ space.matrix_RGB_to_XYZ.T
    # both sides carry matrices rounded at the fourth digit of the white point
    np.testing.assert_allclose(
        colour.srgb_to_oklab(srgb), colour_science.XYZ_to_Oklab(xyz), atol=5e-4
    )


def test_oklab_of_the_white_point_and_of_xyz_unit_vectors_is_as_published():
    # Ottosson (2020), table of test values: D65 is (1, 0, 0); XYZ (0, 1, 0) is (0.922, -0.671,
    # 0.263). The values are checked against colour-science, which carries the XYZ form.
    expected = colour_science.XYZ_to_Oklab([0.0, 1.0, 0.0])
    np.testing.assert_allclose(expected, [0.922, -0.671, 0.263], atol=1e-3)
    back = np.linalg.inv(colour_science.RGB_COLOURSPACES["sRGB"].matrix_RGB_to_XYZ)
    np.testing.assert_allclose(colour.linear_to_oklab(back @ [0, 1, 0]), expected, atol=2e-3)
    np.testing.assert_allclose(colour.srgb_to_oklab([1, 1, 1]), [1, 0, 0], atol=1e-6)


@pytest.mark.parametrize(("name", "kind"), KINDS.items())
def test_deficiency_matrices_are_those_published_for_full_severity(name, kind):
    # Machado, Oliveira & Fernandes (2009), as carried by colour-science
    np.testing.assert_array_equal(colour.DEFICIENCIES[name], CVD_MATRICES_MACHADO2010[kind][1.0])


@pytest.mark.parametrize("name", KINDS)
def test_greys_look_alike_to_everybody(name):
    greys = np.repeat(np.linspace(0, 1, 11)[:, None], 3, axis=1)
    np.testing.assert_allclose(colour.seen_as(greys, name), greys, atol=2e-3)
