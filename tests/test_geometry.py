"""Where a position lies in another exposure: rotation, scale, dithers, against astropy's WCS."""

import numpy as np
import pytest
from astropy.wcs import WCS

from xcorr.errors import SettingsError
from xcorr.geometry import field_map, plate_matrix, sky_offset_to_pixels


def header(rotation=0.0, scale=0.025, crpix=(10.0, 12.0), swapped=False):
    """Tangent-plane cards; `rotation` turns the sky image from x to y by so many degrees."""
    angle = np.deg2rad(rotation)
    cd = scale / 3600 * np.array([[-np.cos(angle), -np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    kinds, values = ["RA---TAN", "DEC--TAN"], [83.2, -5.4]
    if swapped:
        cd, kinds, values = cd[::-1], kinds[::-1], values[::-1]
    cards = {"CTYPE1": kinds[0], "CTYPE2": kinds[1], "CRVAL1": values[0], "CRVAL2": values[1]}
    cards |= {"CRPIX1": crpix[0], "CRPIX2": crpix[1], "CUNIT1": "deg", "CUNIT2": "deg"}
    return cards | {f"CD{i + 1}_{j + 1}": float(cd[i, j]) for i in range(2) for j in range(2)}


@pytest.mark.parametrize("swapped", [False, True])
@pytest.mark.parametrize("rotation", [0.0, 37.0, -120.0])
def test_plate_matrix_gives_the_sky_offset(rotation, swapped):
    cards = header(rotation, swapped=swapped)
    wcs = WCS(cards, naxis=2)
    start, stop = wcs.pixel_to_world(9.0, 11.0), wcs.pixel_to_world(12.0, 10.0)
    east, north = (part.to_value("arcsec") for part in start.spherical_offsets_to(stop))
    # offsets of 0.1 arcsec: the tangent plane is flat to far better than this
    assert plate_matrix(cards) @ [3.0, -1.0] == pytest.approx([east, north], abs=1e-6)


@pytest.mark.parametrize("rotation", [0.0, 37.0])
def test_sky_offsets_become_pixels(rotation):
    cards = header(rotation)
    x, y = sky_offset_to_pixels((0.1, -0.05), cards)
    wcs = WCS(cards, naxis=2)
    start, stop = wcs.pixel_to_world(9.0, 11.0), wcs.pixel_to_world(9.0 + x, 11.0 + y)
    found = [part.to_value("arcsec") for part in start.spherical_offsets_to(stop)]
    assert found == pytest.approx([0.1, -0.05], abs=1e-6)


def test_north_up_east_left():
    """With CD1_1 < 0 east is to the left: +0.1 arcsec east is four pixels of 25 mas to smaller x."""
    assert sky_offset_to_pixels((0.1, 0.0), header()) == pytest.approx((-4.0, 0.0))
    assert sky_offset_to_pixels((0.0, 0.1), header()) == pytest.approx((0.0, 4.0))


def test_no_wcs_is_said():
    assert plate_matrix(None) is None
    with pytest.raises(SettingsError, match="celestial WCS") as caught:
        sky_offset_to_pixels((0.1, 0.0), None)
    assert "companion_xy" in caught.value.do


def test_map_without_anchors_follows_the_sky():
    first, other = header(0.0), header(30.0, crpix=(14.0, 9.0))
    points = np.array([[3.0, 4.0], [15.5, 11.2]])
    sky = WCS(first, naxis=2).all_pix2world(points, 0)
    expected = WCS(other, naxis=2).all_world2pix(sky, 0)
    assert field_map(first, other, None, None)(points) == pytest.approx(expected, abs=1e-6)


def test_anchors_replace_the_absolute_pointing_but_keep_rotation_and_scale():
    first, other = header(0.0), header(30.0, scale=0.0125, crpix=(500.0, 500.0))
    mapped = field_map(first, other, (8.0, 7.0), (9.5, 6.0))
    assert mapped(np.array([[8.0, 7.0]])) == pytest.approx(np.array([[9.5, 6.0]]))
    # four pixels along x, half the scale: eight pixels, turned by 30 degrees
    offset = mapped(np.array([[12.0, 7.0]]))[0] - [9.5, 6.0]
    assert np.hypot(*offset) == pytest.approx(8.0)
    assert abs(np.rad2deg(np.arctan2(offset[1], offset[0]))) == pytest.approx(30.0)
    # the sense of the rotation is the sky's
    sky = [plate_matrix(first) @ [4.0, 0.0], plate_matrix(other) @ offset]
    assert sky[0] == pytest.approx(sky[1])


def test_without_any_wcs_only_the_shift_is_known():
    mapped = field_map(None, None, (8.0, 7.0), (9.0, 7.5))
    assert mapped(np.array([[1.0, 2.0]])) == pytest.approx(np.array([[2.0, 2.5]]))
    assert field_map(None, None, None, None)([4.0, 5.0]) == pytest.approx(np.array([[4.0, 5.0]]))
