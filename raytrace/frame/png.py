"""PNG files that say what they are: colour space, the scene and seed behind them, and that a formula made them."""

from __future__ import annotations

import io

import numpy as np

# IPTC digital source type of pictures made by a formula (IPTC Photo Metadata Standard 2025.1)
SOURCE_TYPE = "http://cv.iptc.org/newscodes/digitalsourcetype/algorithmicMedia"
_XMP = (
    '<?xpacket begin="\ufeff" id="W5M0MpCehiHzreSzNTczkc9d"?>'
    '<x:xmpmeta xmlns:x="adobe:ns:meta/"><rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#">'
    '<rdf:Description rdf:about="" xmlns:Iptc4xmpExt="http://iptc.org/std/Iptc4xmpExt/2008-02-29/" '
    f'Iptc4xmpExt:DigitalSourceType="{SOURCE_TYPE}"/></rdf:RDF></x:xmpmeta><?xpacket end="r"?>'
)


def png_bytes(rgb: np.ndarray, truth: dict, scene_hash: str) -> bytes:
    """Encode a picture.

    Parameters
    ----------
    rgb : (height, width, 3) uint8
    truth : dict
        For the seed and the version.
    scene_hash : str

    Returns
    -------
    bytes
        PNG with an `sRGB` chunk (perceptual), `iTXt` texts and XMP with the synthetic-media mark.
    """
    from PIL import Image
    from PIL.PngImagePlugin import PngInfo

    info = PngInfo()
    info.add(b"sRGB", b"\x00")
    info.add_itxt("Software", f"raytrace {truth['version']}")
    info.add_itxt("raytrace:scene-sha256", scene_hash)
    info.add_itxt("raytrace:seed", str(truth["optics"]["seed"]))
    info.add_itxt("Comment", "Computed picture, not a photograph.")
    info.add_itxt("XML:com.adobe.xmp", _XMP)
    out = io.BytesIO()
    Image.fromarray(rgb).save(out, "PNG", pnginfo=info, compress_level=4)
    return out.getvalue()


def png_texts(path) -> dict[str, str]:
    """Texts of a PNG file by keyword."""
    from PIL import Image

    with Image.open(path) as picture:
        picture.load()
        return {key: str(value) for key, value in picture.info.items() if isinstance(value, str)}
