"""Where a position of exposure 1 lies in the other exposures: dithers, field rotation, plate scales."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy.wcs import WCS
from numpy.typing import NDArray

from xcorr.errors import SettingsError


def plate_matrix(celestial_header: Mapping[str, Any] | None) -> NDArray[np.float64] | None:
    """Pixel offsets (x, y) to sky offsets (east, north) in arcsec, 2 x 2; None without a celestial WCS."""
    if celestial_header is None:
        return None
    wcs = WCS(dict(celestial_header), naxis=2)
    matrix = wcs.pixel_scale_matrix * 3600.0
    if wcs.wcs.lng == 1:
        matrix = matrix[::-1]
    return matrix


def sky_offset_to_pixels(
    offset_arcsec: tuple[float, float], celestial_header: Mapping[str, Any] | None
) -> tuple[float, float]:
    """Pixel offset (x, y) of a sky offset [east, north].

    Raises
    ------
    SettingsError
        If the cube has no celestial WCS.
    """
    matrix = plate_matrix(celestial_header)
    if matrix is None:
        raise SettingsError(
            "[target].companion_offset_arcsec needs a celestial WCS",
            "a cube without one",
            "give [target].companion_xy in pixels",
        )
    x, y = np.linalg.solve(matrix, np.asarray(offset_arcsec, float))
    return float(x), float(y)


@dataclass(frozen=True)
class FieldMap:
    """Affine map from pixels of exposure 1 to pixels of another exposure.

    Attributes
    ----------
    origin, image : (x, y)
        The same point of the sky in exposure 1 and in the other.
    matrix : array (2, 2)
        Rotation and scale of pixel offsets.
    """

    origin: tuple[float, float]
    image: tuple[float, float]
    matrix: NDArray[np.float64]

    def __call__(self, positions_xy: NDArray) -> NDArray[np.float64]:
        """Positions (n, 2) of exposure 1 in the other exposure."""
        offsets = np.atleast_2d(np.asarray(positions_xy, float)) - self.origin
        return offsets @ self.matrix.T + self.image


def field_map(
    first: Mapping[str, Any] | None,
    other: Mapping[str, Any] | None,
    anchor_first: tuple[float, float] | None,
    anchor_other: tuple[float, float] | None,
) -> FieldMap:
    """Map through the WCS rotations and a common anchor (star or companion); absolute WCS without an anchor.

    Parameters
    ----------
    first, other : celestial headers or None
    anchor_first, anchor_other : (x, y) or None
        Pixel position of the same source in both.
    """
    one, two = plate_matrix(first), plate_matrix(other)
    matrix = np.eye(2) if one is None or two is None else np.linalg.solve(two, one)
    if anchor_first is not None and anchor_other is not None:
        return FieldMap(anchor_first, anchor_other, matrix)
    if first is not None and other is not None:
        header = WCS(dict(first), naxis=2)
        origin = (float(header.wcs.crpix[0]) - 1.0, float(header.wcs.crpix[1]) - 1.0)
        sky = header.wcs_pix2world([origin], 0)
        image = WCS(dict(other), naxis=2).wcs_world2pix(sky, 0)[0]
        return FieldMap(origin, (float(image[0]), float(image[1])), matrix)
    return FieldMap((0.0, 0.0), (0.0, 0.0), matrix)
