"""Waves in rendered pictures: supernumerary arcs, fogbows, and what is drawn apart."""

import itertools
import math

import numpy as np
import pytest
from scipy.special import airy
from skies import HARD, UNIFORM, angle_deg, make_scene

from raytrace import colour
from raytrace.camera.lens import row_directions
from raytrace.frame import render
from raytrace.light.spectrum import illumination
from raytrace.light.sun import direction
from raytrace.optics.scattering import wavelengths_nm

SUN = (20.0, 250.0)
# Thin drops all round the eye, so that what is seen is their light and not the curtain's shape
THIN = {**HARD, "extinction_per_km": 0.02, "near_m": 0.0, "far_m": 3000.0, "bottom_m": -2000.0, "top_m": 6000.0}
THIN |= {"azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0}
OPTICS = {"method": "waves", "paths": 4, "bins": 1800, "wavelength_step_nm": 20.0}
PIXEL_DEG = 0.03


def upright(centre_radius_deg, height_px, pixel_deg):
    """A camera whose middle columns see a bow's top."""
    return {
        "width_px": 8,
        "height_px": height_px,
        "field_of_view_deg": 2 * math.degrees(math.atan(4 * math.radians(pixel_deg))),
        "elevation_deg": centre_radius_deg - SUN[0],
    }


def through_the_top(rain, camera, *, disc=0.533, optics=None):
    """Radius from the antisolar point [deg], rising, and XYZ of the pixels through the bow's top; and the scene."""
    scene = make_scene(
        SUN, rain={**THIN, **rain}, sky={"model": "black"}, camera=camera, disc=disc, optics=OPTICS | (optics or {})
    )
    frame = render(scene, layers=True)
    rays, _ = row_directions(frame.lens, 0, frame.lens.height_px)
    radius = angle_deg(rays, direction(SUN[1] + 180, -SUN[0])).reshape(-1, 8)[:, 3:5].mean(axis=1)
    xyz = sum(layer.astype(float) for layer in frame.layers.values())[:, 3:5].mean(axis=1)
    order = np.argsort(radius)
    return radius[order], xyz[order], scene


def bends(place, values, sign):
    """Places and heights of maxima (sign 1) or minima (-1), by parabolas, from the largest place down."""
    v = sign * values
    at = np.flatnonzero((v[1:-1] > v[:-2]) & (v[1:-1] >= v[2:])) + 1
    down, here, up = values[at - 1], values[at], values[at + 1]
    shift = 0.5 * (down - up) / (down - 2 * here + up)
    return (place[at] + shift * (place[at + 1] - place[at]))[::-1], (here - 0.25 * (down - up) * shift)[::-1]


# --- supernumerary arcs


@pytest.fixture(scope="module")
def half_a_millimetre():
    """Drops of exactly one size and a fixed index, under a point of a sun."""
    rain = {"size_law": "single", "diameter_mm": 0.5, "refractive_index": 1.333}
    return through_the_top(rain, upright(41.0, 130, PIXEL_DEG), disc=0.0, optics={"paths": 3, "bins": 4500})


def test_gap_to_the_first_supernumerary(half_a_millimetre):
    """a = 0.25 mm, n = 1.333: 1.078 deg at 550 nm (Airy's law; recomputed), growing as the wavelength^(2/3).

    In luminance, whose mean wavelength in sunlight is near 560 nm: within a pixel.
    """
    radius, xyz, scene = half_a_millimetre
    nm = wavelengths_nm(scene.optics)
    weight = illumination(scene, nm).direct_normal * colour.xyz_weights(nm)[:, 1]
    mean_nm = weight @ nm / weight.sum()
    places, heights = bends(radius, xyz[:, 1], 1)
    assert heights[0] > heights[1] > heights[2]
    assert places[0] - places[1] == pytest.approx(1.078 * (mean_nm / 550) ** (2 / 3), abs=PIXEL_DEG)
    # and where the main maximum stands: 0.493 deg inside the ray's 180 - 137.922 deg (recomputed)
    assert places[0] == pytest.approx(180 - 137.922 - 0.493 * (mean_nm / 550) ** (2 / 3), abs=PIXEL_DEG)


def test_supernumeraries_are_airys(half_a_millimetre):
    """The first two gaps, and the first minimum, as Airy's integral summed over the light's wavelengths has them."""
    radius, xyz, scene = half_a_millimetre
    nm = wavelengths_nm(scene.optics)
    weight = illumination(scene, nm).direct_normal * colour.xyz_weights(nm)[:, 1]
    inside = np.radians(180 - 137.922 - np.linspace(38.5, 42.5, 4001))
    x = math.pi * 0.5e6 / nm[:, None]
    # offset from the ray's angle in units of h^(1/3) x^(-2/3), h = 4.8992 (recomputed), |S|^2 in proportion to x^(7/3)
    light = airy(-(x ** (2 / 3)) * 4.8992 ** (-1 / 3) * inside)[0] ** 2 * x ** (1 / 3)
    wanted, _ = bends(np.linspace(38.5, 42.5, 4001), weight @ light, 1)
    found, _ = bends(radius, xyz[:, 1], 1)
    np.testing.assert_allclose(found[:3], wanted[:3], atol=PIXEL_DEG)
    dark, _ = bends(np.linspace(38.5, 42.5, 4001), weight @ light, -1)
    assert bends(radius, xyz[:, 1], -1)[0][0] == pytest.approx(dark[0], abs=PIXEL_DEG)


def contrast(radius, luminance):
    """Of the first minimum inside the bow against the maximum beyond it: (L - L_min) / L_min; 0 where there is none."""
    inside = radius > 38.0
    (_, peaks), (_, dips) = (bends(radius[inside], luminance[inside], sign) for sign in (1, -1))
    return 0.0 if peaks.size < 2 or dips.size == 0 else peaks[1] / dips[0] - 1


@pytest.fixture(scope="module")
def contrasts():
    """Water's own index and the sun's disc, as it is seen."""
    laws = {
        "one size": {"size_law": "single", "diameter_mm": 0.5},
        "5 %": {"size_law": "single", "diameter_mm": 0.5, "relative_spread": 0.05},
        "30 %": {"size_law": "single", "diameter_mm": 0.5, "relative_spread": 0.3},
        "rain": {"size_law": "marshall_palmer_1948", "rain_rate_mm_h": 5.0},
    }
    found = {}
    for name, law in laws.items():
        optics = {"method": "auto", "paths": 3, "rays": 100_000}
        radius, xyz, _ = through_the_top(law, upright(40.0, 100, 0.06), optics=optics)
        found[name] = contrast(radius, xyz[:, 1])
    return found


def test_supernumeraries_of_narrow_laws(contrasts):
    """Far above the eye's threshold of contrast, about 0.02 in the laboratory and 0.05 in the air (CIE, quoted)."""
    assert contrasts["one size"] > contrasts["5 %"] > 0.5


def test_supernumeraries_wash_out(contrasts):
    """3.7 % are left with a spread of 30 %, and nothing in rain."""
    assert contrasts["30 %"] < 0.05
    assert contrasts["rain"] < 0.02


# --- fogbows

RADII_UM = (50.0, 20.0, 10.0, 5.0)


def uv(xyz):
    """CIE 1976 u', v'."""
    x, y, z = np.moveaxis(xyz, -1, 0)
    return np.stack([4 * x, 9 * y], axis=-1) / (x + 15 * y + 3 * z)[..., None]


class Bow:
    """A bow's main maximum in luminance, and its outer flank down to half of its height over what lies outside."""

    def __init__(self, rain, camera, **optics):
        radius, xyz, scene = through_the_top(rain, camera, optics={"paths": 3, **optics})
        places, heights = bends(radius, xyz[:, 1], 1)
        self.radius_deg = places[np.argmax(heights)]
        outside = radius >= self.radius_deg
        height = xyz[outside, 1] - xyz[outside, 1].min()
        flank = height > 0.5 * height.max()
        self.half_width_deg = radius[outside][flank].max() - self.radius_deg
        nm = wavelengths_nm(scene.optics)
        sunlight = illumination(scene, nm).direct_normal @ colour.xyz_weights(nm)
        self.colour = np.linalg.norm(uv(xyz[outside][flank]) - uv(sunlight), axis=-1).max()


@pytest.fixture(scope="module")
def fogbows():
    laws = {"size_law": "deirmendjian_1969", "effective_variance": 0.1}
    return [Bow({**laws, "effective_radius_um": r}, upright(36.0, 200, 0.12)) for r in RADII_UM]


def test_fogbows_shrink_and_widen(fogbows):
    radius, width = ([getattr(bow, name) for bow in fogbows] for name in ("radius_deg", "half_width_deg"))
    assert (np.diff(radius) < 0).all()
    assert (np.diff(width) > 0).all()
    # common practice, no source: a few degrees smaller than rain's 42
    assert 2 < 42 - radius[2] < 5


def test_fogbows_pale(fogbows):
    """Distance from sunlight in u'v' (CIE 1976), where the bow is most coloured, its red outer flank.

    The peak of luminance itself, where the colours overlap, is no measure: it is nearly white for all sizes.
    """
    rain = Bow({"size_law": "marshall_palmer_1948"}, upright(40.0, 100, 0.06), method="auto", rays=100_000)
    found = [rain.colour, *(bow.colour for bow in fogbows)]
    assert (np.diff(found) < 0).all()
    # a fogbow of 10 um is white: below 0.02, rain's bow is far above
    assert found[3] < 0.02 < 0.04 < found[0]


# --- what is drawn apart


FOG = {**THIN, "size_law": "deirmendjian_1969", "effective_radius_um": 8.0}
ROUND = {"projection": "panorama", "field_of_view_deg": 360.0, "width_px": 180, "height_px": 90}
ROUND |= {"azimuth_deg": 70.0, "elevation_deg": 0.0}


@pytest.mark.parametrize("method", ["rays", "airy", "waves", "auto"])
def test_layers_only_where_they_are_asked_for(method):
    for glory, aureole in itertools.product((False, True), repeat=2):
        optics = {"method": method, "glory": glory, "aureole": aureole, "paths": 3, "bins": 360, "rays": 1000}
        frame = render(make_scene(SUN, rain=FOG, optics=optics), layers=True)
        # rays know of neither
        wanted = [] if method == "rays" else ["glory"] * glory + ["aureole"] * aureole
        assert [name for name in frame.layers if name in ("glory", "aureole")] == wanted


@pytest.fixture(scope="module")
def all_round():
    """Fog all round, by scattering angle: layers' luminance with and without what is drawn apart."""
    found = []
    for apart in (False, True):
        scene = make_scene(SUN, rain=FOG, sky=UNIFORM, camera=ROUND, optics=OPTICS | {"glory": apart, "aureole": apart})
        frame = render(scene, layers=True)
        rays, _ = row_directions(frame.lens, 0, frame.lens.height_px)
        found.append({name: layer[..., 1].astype(float) for name, layer in frame.layers.items()})
    theta = 180 - angle_deg(rays, direction(SUN[1], SUN[0])).reshape(90, 180)
    return (*found, 180 - theta)


def test_the_glory_stands_round_the_antisolar_point(all_round):
    plain, apart, theta = all_round
    # pixels are two degrees wide
    assert (apart["glory"][theta > 166] > 0).all()
    assert not apart["glory"][theta < 161].any()
    assert apart["glory"][theta > 178].mean() > 2 * apart["glory"][(theta > 166) & (theta < 170)].mean()
    # it stands in the orders' place
    for name in ("external", "straight", "order1", "order2"):
        assert not apart[name][theta > 167].any()
        np.testing.assert_allclose(apart[name][theta < 161], plain[name][theta < 161], rtol=1e-6)


def test_the_aureole_is_left_out_unless_asked_for(all_round):
    """What fog diffracts outshines all else near the sun, and only there."""
    plain, apart, theta = all_round
    near, far = theta < 4, (theta > 40) & (theta < 160)
    drops = sum(plain[name] for name in ("external", "straight", "order1", "order2"))
    assert apart["aureole"][near].mean() > 10 * drops[near].mean()
    assert apart["aureole"][far].mean() < 0.05 * drops[far].mean()
    np.testing.assert_allclose(plain["external"][near], apart["external"][near], rtol=1e-6)
