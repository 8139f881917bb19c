"""PNG files that say what they are."""

import struct
import zlib

import numpy as np
import pytest

from raytrace.frame.png import SOURCE_TYPE, png_bytes, png_texts

HASH = "0123456789abcdef" * 4
TRUTH = {"version": "9.8.7", "optics": {"seed": 0}}


@pytest.fixture(scope="module")
def rgb():
    return np.random.default_rng(5).integers(0, 256, (7, 11, 3), dtype=np.uint8)


@pytest.fixture(scope="module")
def data(rgb):
    return png_bytes(rgb, TRUTH, HASH)


def chunks(data):
    """Chunks of a PNG file as (type, body), their checksums held against the PNG specification's CRC."""
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    at, out = 8, []
    while at < len(data):
        (length,) = struct.unpack(">I", data[at : at + 4])
        kind, body = data[at + 4 : at + 8], data[at + 8 : at + 8 + length]
        assert struct.unpack(">I", data[at + 8 + length : at + 12 + length])[0] == zlib.crc32(kind + body)
        out.append((kind, body))
        at += 12 + length
    return out


def texts(data):
    """iTXt chunks by keyword: (compressed, UTF-8 text), per the PNG specification (third edition), 11.3.3.4."""
    out = {}
    for kind, body in chunks(data):
        if kind == b"iTXt":
            keyword, rest = body.split(b"\0", 1)
            _language, _translated, text = rest[2:].split(b"\0", 2)
            assert keyword.decode() not in out
            out[keyword.decode("latin-1")] = rest[0], text.decode("utf-8")
    return out


def test_srgb_is_the_only_colour_chunk(data):
    kinds = [kind for kind, _ in chunks(data)]
    colour = [kind for kind in kinds if kind in (b"sRGB", b"gAMA", b"cHRM", b"iCCP", b"cICP")]
    assert colour == [b"sRGB"]
    # before the picture's data, or readers may not heed it; one byte, the rendering intent
    assert kinds.index(b"sRGB") < kinds.index(b"IDAT")
    assert dict(chunks(data))[b"sRGB"] in (b"\0", b"\1", b"\2", b"\3")
    assert kinds[0] == b"IHDR" and kinds[-1] == b"IEND"


def test_eight_bits_rgb_and_every_pixel(data, rgb):
    from PIL import Image

    width, height, depth, colour_type, *_ = struct.unpack(">IIBBBBB", dict(chunks(data))[b"IHDR"])
    assert (width, height, depth, colour_type) == (11, 7, 8, 2)
    import io

    with Image.open(io.BytesIO(data)) as picture:
        np.testing.assert_array_equal(np.asarray(picture), rgb)


def test_texts(data):
    found = texts(data)
    assert not any(kind in (b"tEXt", b"zTXt") for kind, _ in chunks(data))
    assert found["raytrace:scene-sha256"] == (0, HASH)
    assert found["raytrace:seed"] == (0, "0")
    assert found["Software"] == (0, "raytrace 9.8.7")


def test_marked_as_made_by_a_formula(data):
    # IPTC Photo Metadata Standard 2025.1; XMP part 3: the packet lies uncompressed under this keyword
    from xml.etree import ElementTree

    compressed, packet = texts(data)["XML:com.adobe.xmp"]
    assert compressed == 0
    assert packet.startswith("<?xpacket begin=") and packet.rstrip().endswith('<?xpacket end="r"?>')
    body = packet[packet.index("<x:xmpmeta") : packet.rindex("<?xpacket")]
    (description,) = ElementTree.fromstring(body).iter("{http://www.w3.org/1999/02/22-rdf-syntax-ns#}Description")
    mark = description.get("{http://iptc.org/std/Iptc4xmpExt/2008-02-29/}DigitalSourceType")
    assert mark == SOURCE_TYPE == "http://cv.iptc.org/newscodes/digitalsourcetype/algorithmicMedia"


def test_round_trip_of_texts(data, tmp_path):
    path = tmp_path / "frame.png"
    path.write_bytes(data)
    found = png_texts(path)
    assert found["raytrace:scene-sha256"] == HASH
    assert found["raytrace:seed"] == "0"
    assert found["Software"] == "raytrace 9.8.7"
    assert SOURCE_TYPE in found["XML:com.adobe.xmp"]


def test_same_picture_same_bytes(data, rgb):
    assert png_bytes(rgb, TRUTH, HASH) == data
    assert png_bytes(rgb, {"version": "9.8.7", "optics": {"seed": 1}}, HASH) != data


def test_large_seed(rgb):
    assert texts(png_bytes(rgb, {"version": "1", "optics": {"seed": 2**63 - 1}}, HASH))["raytrace:seed"][1] == str(
        2**63 - 1
    )
