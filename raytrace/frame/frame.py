"""A frame: the picture, its luminance, what made it, and how it is written."""

from __future__ import annotations

import dataclasses
import io
from pathlib import Path

import numpy as np

from raytrace.camera.develop import Exposure
from raytrace.camera.lens import Lens
from raytrace.frame.png import png_bytes


@dataclasses.dataclass(frozen=True, eq=False)
class Frame:
    """A rendered scene.

    Attributes
    ----------
    rgb : (height, width, 3) uint8
        The picture, sRGB.
    luminance : (height, width) float32
        Absolute luminance of each pixel [cd/m2].
    layers : dict of str to (height, width, 3) float32, or None
        XYZ of each layer, where asked for; their sum is the picture [cd/m2].
    truth : dict
        Sun, antisolar point, exposure and optics as numbers with units in their names.
    exposure : Exposure
    lens : Lens
    scene_hash : str
    clipped, out_of_gamut : int
        Pixels that reached white, and pixels desaturated into sRGB.
    seconds : float
        What the rendering took.
    """

    rgb: np.ndarray
    luminance: np.ndarray
    layers: dict | None
    truth: dict
    exposure: Exposure
    lens: Lens
    scene_hash: str
    clipped: int
    out_of_gamut: int
    seconds: float

    def save(self, path) -> None:
        """Write the picture as PNG, whole or not at all.

        Raises
        ------
        InputError
            If the name does not end in .png or the folder cannot be written.
        """
        from raytrace.errors import InputError
        from raytrace.files import write_atomic

        path = Path(path)
        if path.suffix.lower() != ".png":
            raise InputError(f"{path}: a picture is written as PNG; a name that ends in .png would work")
        write_atomic(path, self.png())

    def png(self) -> bytes:
        """The picture as the bytes of a PNG file, with the scene's hash, the seed and the program's version in it."""
        return png_bytes(self.rgb, self.truth, self.scene_hash)

    def _repr_png_(self) -> bytes:
        """Show the frame in a notebook."""
        from PIL import Image

        picture = Image.fromarray(self.rgb)
        picture.thumbnail((1600, 1600))
        out = io.BytesIO()
        picture.save(out, "PNG")
        return out.getvalue()

    def summary(self) -> str:
        """One line: size, sun, exposure, rays, seconds, clipped and out-of-gamut pixels."""
        sun, height, width = self.truth["sun"], *self.rgb.shape[:2]
        rays = self.truth["optics"]["rays_traced"]
        return (
            f"{width}x{height} px, sun {sun['elevation_deg']:.1f} deg up at azimuth {sun['azimuth_deg']:.1f} deg, "
            f"white {self.exposure.white_cd_m2:.3g} cd/m2 by {self.exposure.how}, {rays / 1e6:.4g} M rays, "
            f"{self.seconds:.1f} s, {self.clipped} clipped, {self.out_of_gamut} out of gamut"
        )
