"""From radiance to a picture: exposure, white balance, gamut, transfer function, eight bits."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace import colour
from raytrace.jit import kernel
from raytrace.random_stream import stream_state, uniform

# ISO 12232 saturation-based speed, as the sensor standards use it: L_sat = 120 N^2 / (S t)
SATURATION_CD_M2 = 120.0
_CODES = 16_384
_LUMA = tuple(float(v) for v in colour.SRGB_TO_XYZ[1])
_L0, _L1, _L2 = _LUMA
_DITHER_DIMENSION = 1_000_003


class Exposure(NamedTuple):
    """How bright is white.

    Attributes
    ----------
    white_cd_m2 : float
        Luminance that the picture shows as white [cd/m2].
    how : str
        In words, with units.
    """

    white_cd_m2: float
    how: str


def manual_exposure(f_number: float, shutter_s: float, iso: float) -> Exposure:
    """Exposure by f-number, time and ISO speed: white is L_sat = 120 N² / (S t) (ISO 12232, saturation-based speed)."""
    shutter = f"1/{1 / shutter_s:.0f} s" if shutter_s < 0.3 else f"{shutter_s:g} s"
    return Exposure(SATURATION_CD_M2 * f_number**2 / (iso * shutter_s), f"f/{f_number:g} {shutter} ISO {iso:g}")


def automatic_exposure(luminance, percentile: float, level: float) -> Exposure:
    """Exposure that puts a percentile of the picture's luminance at a share of white.

    Parameters
    ----------
    luminance : (n,) array
        Luminance of the pixels that the lens images [cd/m2].
    percentile : float
        1 to 100.
    level : float
        Share of white, linear.
    """
    at = float(np.percentile(luminance, percentile)) if luminance.size else 0.0
    # a black picture has no exposure of its own: any will do
    white = at / level if at > 0 and math.isfinite(at) else 1.0
    return Exposure(white, f"auto ({percentile:g} % of pixels below {level:g} of white)")


def xyz_to_display(white_balance: str, sun_xyz) -> np.ndarray:
    """(3, 3) matrix from scene XYZ to linear sRGB.

    Parameters
    ----------
    white_balance : {"d65", "sun"}
        "sun" adapts the direct sunlight's colour to white (Bradford).
    sun_xyz : (3,) array
        Direct sunlight as XYZ, any scale.
    """
    matrix = np.linalg.inv(colour.SRGB_TO_XYZ)
    if white_balance == "sun" and sun_xyz[1] > 0:
        white = colour.xy_to_XYZ1(colour.D65_XY)
        matrix = matrix @ colour.adaptation_matrix(np.asarray(sun_xyz) / sun_xyz[1], white)
    return matrix


@kernel
def develop_pixels(xyz, matrix, codes, stream, first, dither, rgb, counts):
    """Develop pixels to eight bits.

    Parameters
    ----------
    xyz : (n, 3) float32
        Scaled so that white has Y = 1.
    matrix : (3, 3) float64
        To linear sRGB.
    codes : (steps + 1,) float64
        Encoded value times 255 over equal steps of the square root of the linear value.
    stream : uint64
        Of the dither: half a step of noise, without which smooth skies would show bands.
    first : int
        Number of the first pixel in the picture.
    dither : bool
    rgb : (n, 3) uint8
        Written.
    counts : (2,) int64
        Added to: pixels clipped at white, pixels brought into the gamut.
    """
    steps = codes.size - 1
    c = np.empty(3)
    for i in range(xyz.shape[0]):
        for k in range(3):
            c[k] = matrix[k, 0] * xyz[i, 0] + matrix[k, 1] * xyz[i, 1] + matrix[k, 2] * xyz[i, 2]
        y = _L0 * c[0] + _L1 * c[1] + _L2 * c[2]
        if y >= 1.0:
            # the sensor is full: white
            counts[0] += 1
            c[0] = c[1] = c[2] = 1.0
        else:
            # towards grey of the same luminance until no component is below 0 or above 1
            t = 1.0
            for k in range(3):
                if c[k] < 0.0:
                    t = min(t, y / (y - c[k]) if y > 0.0 else 0.0)
                elif c[k] > 1.0:
                    t = min(t, (1.0 - y) / (c[k] - y))
            if t < 1.0:
                # rounding in the conversion of a colour on the gamut's edge does not count
                if t < 1.0 - 1e-4:
                    counts[1] += 1
                for k in range(3):
                    c[k] = min(max(y + t * (c[k] - y), 0.0), 1.0)
        for k in range(3):
            at = math.sqrt(c[k]) * steps
            j = min(int(at), steps - 1)
            code = codes[j] + (at - j) * (codes[j + 1] - codes[j])
            noise = 0.5
            if dither and 0.0 < code < 255.0:
                noise = uniform(stream, np.uint64(3 * (first + i) + k))
            rgb[i, k] = np.uint8(min(code + noise, 255.0))


def code_table() -> np.ndarray:
    """Encoded sRGB times 255 over equal steps of the square root of the linear value."""
    return 255.0 * colour.encode_srgb(np.linspace(0.0, 1.0, _CODES + 1) ** 2)


def dither_stream(seed: int) -> np.uint64:
    """Stream of the dither of a picture."""
    return stream_state(seed, 0, _DITHER_DIMENSION)
