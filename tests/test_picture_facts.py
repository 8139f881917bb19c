"""What every rainbow shows, found in rendered pictures: where the bows stand, their colours and their order."""

import math

import numpy as np
import pytest
from skies import HARD, angle_deg, around, make_scene

from raytrace import colour
from raytrace.camera.lens import direction_pixels, row_directions
from raytrace.frame import render
from raytrace.light.sun import direction

BLACK = {"model": "black"}
# Thin rain all round the eye, so that what is seen is the drops' light and not the curtain's shape
THIN = {**HARD, "extinction_per_km": 0.02, "near_m": 0.0, "far_m": 3000.0, "bottom_m": -2000.0, "top_m": 6000.0}
THIN |= {"azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0}
OPTICS = {"bins": 3600, "rays": 40_000}
SUN = (20.0, 250.0)
TO_RGB = np.linalg.inv(colour.SRGB_TO_XYZ)


class Strip:
    """An upright strip of a picture through a bow's top: radius from the antisolar point, pixel by pixel."""

    def __init__(
        self, centre_radius_deg, height_px, pixel_deg, *, sun=SUN, rain=None, sky=None, optics=None, disc=0.533
    ):
        camera = {
            "width_px": 8,
            "height_px": height_px,
            "field_of_view_deg": 2 * math.degrees(math.atan(4 * math.radians(pixel_deg))),
            "elevation_deg": centre_radius_deg - sun[0],
        }
        scene = make_scene(
            sun,
            rain={**THIN, **(rain or {})},
            sky=sky or BLACK,
            camera=camera,
            optics=OPTICS,
            disc=disc,
        )
        self.frame = render(scene, layers=True)
        rays, _ = row_directions(self.frame.lens, 0, height_px)
        antisolar = direction(sun[1] + 180, -sun[0])
        # the middle two columns see the bow's very top
        self.radius_deg = angle_deg(rays, antisolar).reshape(height_px, 8)[:, 3:5].mean(axis=1)
        xyz = sum(layer.astype(float) for layer in self.frame.layers.values())
        self.xyz = xyz[:, 3:5].mean(axis=1)
        self.luminance = self.frame.luminance[:, 3:5].mean(axis=1)
        self.rgb = self.frame.rgb[:, 2:6].mean(axis=1)
        self.pixel_deg = np.abs(np.diff(self.radius_deg)).max()

    def mean(self, low, high, values=None):
        values = self.luminance if values is None else values
        return values[(self.radius_deg >= low) & (self.radius_deg < high)].mean(axis=0)

    def peak_deg(self, values, low, high):
        inside = (self.radius_deg >= low) & (self.radius_deg < high)
        return self.radius_deg[inside][np.argmax(values[inside])]


@pytest.fixture(scope="module")
def both_bows():
    return Strip(47.0, 760, 0.04)


# Common practice, no source: the facts below that name none.


def test_red_is_outside_in_the_primary_and_inside_in_the_secondary(both_bows):
    red, green, blue = (both_bows.xyz @ TO_RGB.T).T
    peak = [both_bows.peak_deg(c, 38, 44) for c in (red, green, blue)]
    assert peak[0] > peak[1] + 0.2 and peak[1] > peak[2] + 0.2
    peak = [both_bows.peak_deg(c, 48, 57) for c in (red, green, blue)]
    assert peak[0] < peak[1] - 0.2 and peak[1] < peak[2] - 0.2


def test_red_edges_in_the_eight_bits(both_bows):
    # the outermost part of the primary and the innermost of the secondary, as the file shows them
    red, _, blue = both_bows.rgb.T
    for low, high in ((42.1, 42.6), (50.1, 50.7)):
        assert both_bows.mean(low, high, red) > 1.5 * both_bows.mean(low, high, blue) + 10
    # towards the bows' other sides blue gains on red
    for edge, far in (((42.1, 42.6), (40.3, 40.8)), ((50.1, 50.7), (53.2, 53.8))):
        ratio = [both_bows.mean(*part, blue) / both_bows.mean(*part, red) for part in (edge, far)]
        assert ratio[1] > 2 * ratio[0]


def test_bright_inside_dark_between(both_bows):
    inside, band, outside = (both_bows.mean(*part) for part in ((35, 39), (43.5, 49.5), (55, 58)))
    assert inside > 3 * band
    assert outside > 1.2 * band
    assert inside > outside
    darkest = both_bows.radius_deg[np.argmin(both_bows.luminance)]
    assert 42.5 < darkest < 50.5
    # it is not empty: external reflection and orders 5 and 6 reach into it (Wang & van de Hulst 1991; published)
    assert band > 0
    assert both_bows.frame.layers["external"][..., 1].min() > 0


def test_dark_band_width():
    # Alexander's band for n = 1.331: 42.37 to 50.37 deg (recomputed), of which the sun's disc takes 0.53 of its 8.00.
    strip = Strip(46.4, 260, 0.04, rain={"refractive_index": 1.331})
    primary, secondary = (strip.frame.layers[name][:, 3:5, 1].mean(axis=1) for name in ("order1", "order2"))
    inner = strip.radius_deg[primary > 0.01 * primary.max()].max()
    outer = strip.radius_deg[secondary > 0.01 * secondary.max()].min()
    assert outer - inner == pytest.approx(8.00 - 0.53, abs=2 * (strip.pixel_deg + 0.025))


def test_common_radii(both_bows):
    # "the primary stands about 42 deg and the secondary about 51 deg from the antisolar point"
    assert both_bows.peak_deg(both_bows.luminance, 38, 45) == pytest.approx(42, abs=0.6)
    assert both_bows.peak_deg(both_bows.luminance, 48, 56) == pytest.approx(51, abs=1.0)


def test_each_further_bow_is_fainter():
    camera = {"projection": "panorama", "width_px": 240, "height_px": 120, "elevation_deg": 0.0}
    frame = render(make_scene(SUN, rain=THIN, sky=BLACK, camera=camera, optics=OPTICS), layers=True)
    peak = [frame.layers[f"order{k}"][..., 1].max() for k in range(1, 5)]
    total = [frame.layers[f"order{k}"][..., 1].sum() for k in range(1, 5)]
    for values in (peak, total):
        assert values[0] > 2 * values[1]
        assert values[1] > values[2] > values[3] > 0


@pytest.mark.parametrize(
    ("order", "bow_deg", "sign"),
    # n = 1.333: deviation 137.922 and 230.891 deg (recomputed to 0.001), radius 42.078 and 50.891.
    [(1, 42.078, 1), (2, 50.891, -1)],
)
@pytest.mark.parametrize("disc", [0.0, 0.533])
def test_edge_at_the_right_pixel(order, bow_deg, sign, disc):
    strip = Strip(bow_deg, 100, 0.04, rain={"refractive_index": 1.333}, disc=disc)
    layer = strip.frame.layers[f"order{order}"][:, 3:5, 1].mean(axis=1)
    lit = strip.radius_deg[layer > 0.01 * layer.max()]
    assert lit.size > 20
    foot = lit.max() if sign > 0 else lit.min()
    # the foot of the edge, half a disc beyond the bow ray: to a pixel (bins of 0.05 deg add half of one)
    assert foot == pytest.approx(bow_deg + sign * disc / 2, abs=strip.pixel_deg + 0.025)
    # and the same in the picture as a whole, where the other orders shine as well
    dark = strip.mean(*((43.0, 43.8) if sign > 0 else (49.0, 50.3)))
    bright = strip.luminance > dark + 0.02 * (strip.luminance.max() - dark)
    edge = strip.radius_deg[bright].max() if sign > 0 else strip.radius_deg[bright].min()
    assert edge == pytest.approx(bow_deg + sign * disc / 2, abs=strip.pixel_deg + 0.025)


@pytest.mark.parametrize(
    "camera",
    [
        {"projection": "perspective", "field_of_view_deg": 110.0, "elevation_deg": 15.0, "roll_deg": -10.0},
        {"projection": "fisheye", "field_of_view_deg": 150.0, "elevation_deg": 40.0},
        {"projection": "panorama", "width_px": 480, "height_px": 240, "elevation_deg": 0.0},
    ],
    ids=lambda c: c["projection"],
)
def test_the_edge_is_a_circle_in_every_lens(camera):
    camera = {"width_px": 240, "height_px": 160, **camera}
    frame = render(
        make_scene(SUN, rain={**THIN, "refractive_index": 1.333}, sky=BLACK, camera=camera, optics=OPTICS), layers=True
    )
    layer, edge = frame.layers["order1"][..., 1], 42.078 + 0.2665
    found = 0
    for turn in range(-60, 61, 10):
        for offset_px, lit in ((-1.6, True), (1.0, False)):
            # inside the edge there is light, outside none
            ray = around((70.0, -20.0), edge + offset_px * math.degrees(frame.lens.pixel_rad), turn)[0]
            x, y, seen = direction_pixels(frame.lens, ray)
            if not seen:
                continue
            assert (layer[int(y), int(x)] > 0.01 * layer.max()) == lit, (turn, offset_px)
            found += 1
    assert found >= 14


def test_spray_bow_is_smaller():
    # Sea water of 35 permille at 20 degC (Quan & Fry 1995): the primary is 0.91 to 0.94 deg smaller (recomputed).
    edges = []
    for water in ("fresh", "sea"):
        strip = Strip(41.8, 110, 0.04, rain={"water": water, "temperature_c": 20.0})
        red = strip.xyz @ TO_RGB[0]
        at = np.flatnonzero(red > 0.5 * red.max())
        first = at[np.argmax(strip.radius_deg[at])]
        # between the last pixel above half the peak and its neighbour outside
        step = (red[first] - 0.5 * red.max()) / (red[first] - red[first - 1])
        edges.append(strip.radius_deg[first] + step * (strip.radius_deg[first - 1] - strip.radius_deg[first]))
    assert 0.90 < edges[0] - edges[1] < 0.95


def test_bows_redden_as_the_sun_sinks():
    # Gedzelman 2008; published
    x = {}
    for elevation in (2.0, 8.0, 30.0):
        strip = Strip(41.8, 60, 0.1, sun=(elevation, 250.0))
        total = strip.mean(38.9, 43.0, strip.xyz)
        x[elevation] = total[0] / total.sum()
    assert x[2.0] > x[8.0] + 0.02 > x[30.0] + 0.03


@pytest.mark.parametrize("elevation", [0.5, 10.0, 25.0, 38.0])
def test_height_of_the_bow(elevation):
    strip = Strip(42.0, 100, 0.1, sun=(elevation, 250.0))
    peak = strip.peak_deg(strip.xyz @ TO_RGB[0], 38, 46)
    rays, _ = row_directions(strip.frame.lens, 0, 100)
    row = int(np.argmin(np.abs(strip.radius_deg - peak)))
    top = math.degrees(math.asin(rays.reshape(100, 8, 3)[row, 3, 2]))
    assert top == pytest.approx(42 - elevation, abs=0.5)


@pytest.mark.parametrize(("elevation", "seen"), [(38.0, True), (50.0, False)])
def test_no_primary_over_the_horizon_when_the_sun_is_high(elevation, seen):
    camera = {"projection": "panorama", "width_px": 180, "height_px": 90, "elevation_deg": 0.0}
    frame = render(make_scene((elevation, 250.0), rain=THIN, sky=BLACK, camera=camera), layers=True)
    assert frame.layers["order1"][:45].any() == seen
    assert frame.layers["order1"][45:].any()


def test_bows_three_and_four_stand_round_the_sun():
    # Großmann et al. 2011, Theusner 2011, quoted: about 40 and 45 deg from the sun; n = 1.333: 41.737, 43.703.
    camera = {"projection": "fisheye", "field_of_view_deg": 130.0, "azimuth_deg": SUN[1], "elevation_deg": 20.0}
    camera |= {"width_px": 260, "height_px": 260}
    rain = {**THIN, "refractive_index": 1.333}
    frame = render(make_scene(SUN, rain=rain, sky=BLACK, camera=camera, optics=OPTICS), layers=True)
    rays, _ = row_directions(frame.lens, 0, 260)
    from_sun = angle_deg(rays, direction(SUN[1], SUN[0])).reshape(260, 260)
    for order, deviation in ((3, 318.263), (4, 403.703)):
        radius = abs(deviation - 360)
        layer = frame.layers[f"order{order}"][..., 1]
        assert from_sun.flat[np.argmax(layer)] == pytest.approx(radius, abs=0.6)


def test_bow_before_a_bright_sky():
    # the same order of brightness holds against a uniform sky, and the rain's own skylight changes nothing
    sky = {"model": "uniform", "luminance_cd_m2": 800.0}
    strip = Strip(47.0, 190, 0.16, rain={"extinction_per_km": 0.5}, sky=sky)
    inside, band, outside = (strip.mean(*part) for part in ((35, 39), (43.5, 49.5), (55, 58)))
    assert inside > outside > band > 800
    assert strip.peak_deg(strip.luminance, 34, 60) == pytest.approx(42, abs=0.6)
