"""Lenses: conventions, closed forms, and there and back."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from skies import angle_deg

from raytrace.camera.lens import (
    PROJECTIONS,
    azimuth_span,
    direction_pixels,
    make_lens,
    pixel_directions,
    row_directions,
)
from raytrace.light.sun import direction
from raytrace.scene.model import Camera


def lens(projection="perspective", *, antisolar=70.0, **keys):
    return make_lens(
        Camera(projection=projection, **{"width_px": 120, "height_px": 80, "elevation_deg": 0.0, **keys}), antisolar
    )


def look(a_lens, x, y):
    """Azimuth and elevation seen at a pixel coordinate [deg]."""
    ray, inside = pixel_directions(a_lens, x, y)
    assert inside.all()
    return math.degrees(math.atan2(ray[0], ray[1])) % 360, math.degrees(math.asin(ray[2]))


angles = st.floats(-90, 90)


@pytest.mark.parametrize("projection", PROJECTIONS)
@given(azimuth=st.floats(0, 360), elevation=angles, roll=st.floats(-180, 180), x=st.floats(0, 1), y=st.floats(0, 1))
def test_pixel_direction_pixel(projection, azimuth, elevation, roll, x, y):
    a_lens = lens(projection, azimuth_deg=azimuth, elevation_deg=elevation, roll_deg=roll)
    x, y = x * 120, y * 80
    ray, inside = pixel_directions(a_lens, x, y)
    assert np.linalg.norm(ray) == pytest.approx(1, abs=1e-12)
    if not inside:
        return
    back_x, back_y, seen = direction_pixels(a_lens, ray)
    if projection == "panorama":
        # its first and last column meet, and at the poles all columns do
        if abs(y - 40) * a_lens.pixel_rad > math.radians(89.9):
            return
        back_x = x + (back_x - x + 60) % 120 - 60
    np.testing.assert_allclose([back_x, back_y], [x, y], atol=1e-6)
    # on the very edge rounding may fall either way
    if 1e-6 < x < 120 - 1e-6 and 1e-6 < y < 80 - 1e-6 and math.hypot(x - 60, y - 40) < 40 - 1e-6:
        assert seen


@pytest.mark.parametrize("projection", PROJECTIONS)
@given(azimuth=st.floats(0, 360), elevation=angles, roll=st.floats(-180, 180), to=st.tuples(st.floats(0, 360), angles))
def test_direction_pixel_direction(projection, azimuth, elevation, roll, to):
    a_lens = lens(projection, azimuth_deg=azimuth, elevation_deg=elevation, roll_deg=roll, field_of_view_deg=100.0)
    ray = direction(*to)
    x, y, seen = direction_pixels(a_lens, ray)
    if seen:
        back, inside = pixel_directions(a_lens, x, y)
        assert angle_deg(back, ray) < 1e-6
        assert inside


@given(azimuth=st.floats(-360, 720), elevation=angles, roll=st.floats(-180, 180))
def test_rotation_is_right_handed_and_orthonormal(azimuth, elevation, roll):
    rotation = lens(azimuth_deg=azimuth, elevation_deg=elevation, roll_deg=roll).rotation
    np.testing.assert_allclose(rotation @ rotation.T, np.eye(3), atol=1e-12)
    assert np.linalg.det(rotation) == pytest.approx(1, abs=1e-12)
    np.testing.assert_allclose(rotation[2], direction(azimuth, elevation), atol=1e-12)


@pytest.mark.parametrize("projection", PROJECTIONS)
def test_the_first_pixels_centre_is_a_half(projection):
    a_lens = lens(projection, width_px=10, height_px=8, field_of_view_deg=150.0 if projection == "fisheye" else None)
    rows, inside = row_directions(a_lens, 0, 8)
    assert rows.shape == (80, 3) and inside.shape == (80,)
    for row, column in ((0, 0), (2, 7), (5, 9)):
        expected, _ = pixel_directions(a_lens, column + 0.5, row + 0.5)
        # to the last bit but one: libraries of linear algebra add up in another order for another shape
        np.testing.assert_allclose(rows[row * 10 + column], expected, atol=1e-15)
    later, _ = row_directions(a_lens, 2, 4)
    np.testing.assert_allclose(later, rows[20:40], atol=1e-15)


@pytest.mark.parametrize("projection", PROJECTIONS)
def test_row_0_is_up_and_columns_run_clockwise(projection):
    a_lens = lens(projection, azimuth_deg=130.0, elevation_deg=10.0)
    assert look(a_lens, 60, 40) == pytest.approx((130, 10))
    assert look(a_lens, 60, 30)[1] > 10 > look(a_lens, 60, 50)[1]
    assert look(a_lens, 50, 40)[0] < 130 < look(a_lens, 70, 40)[0]


def test_looks_at_the_antisolar_azimuth_unless_told():
    assert look(lens(antisolar=123.0), 60, 40)[0] == pytest.approx(123)


@pytest.mark.parametrize("projection", PROJECTIONS)
def test_positive_roll_turns_the_camera_clockwise(projection):
    # Seen from behind, a camera rolled by 90 deg clockwise has its right-hand side down and its top to the right.
    a_lens = lens(projection, azimuth_deg=0.0, roll_deg=90.0)
    assert look(a_lens, 80, 40)[1] < -5
    azimuth, elevation = look(a_lens, 60, 20)
    assert 5 < azimuth < 90
    assert elevation == pytest.approx(0, abs=1e-9)


def test_straight_up_and_down():
    for elevation, top_azimuth in ((90.0, 220.0), (-90.0, 40.0)):
        # the picture's top is what a camera tilted up (down) from azimuth 40 deg has above it
        a_lens = lens("fisheye", azimuth_deg=40.0, elevation_deg=elevation)
        ray, _ = pixel_directions(a_lens, 60, 40)
        np.testing.assert_allclose(ray, [0, 0, math.copysign(1, elevation)], atol=1e-12)
        assert look(a_lens, 60, 20) == pytest.approx((top_azimuth, math.copysign(45, elevation)))


@pytest.mark.parametrize("field", [10.0, 60.0, 90.0, 130.0])
def test_perspective_closed_form(field):
    # tan(angle from the axis) = distance from the centre / focal length, and the width spans the field of view
    a_lens = lens(azimuth_deg=0.0, field_of_view_deg=field)
    assert look(a_lens, 120, 40) == pytest.approx((field / 2, 0))
    assert look(a_lens, 0, 40) == pytest.approx((360 - field / 2, 0))
    focal = 60 / math.tan(math.radians(field / 2))
    assert 1 / a_lens.pixel_rad == pytest.approx(focal)
    ray, _ = pixel_directions(a_lens, 75.0, 12.0)
    np.testing.assert_allclose(ray, np.array([15.0, focal, 28.0]) / math.sqrt(15**2 + 28**2 + focal**2), rtol=1e-12)


def test_perspective_does_not_see_behind():
    a_lens = lens(azimuth_deg=0.0)
    *_, seen = direction_pixels(a_lens, direction([180.0, 180.0, 90.0, 0.0], [0.0, 10.0, 0.0, 0.0]))
    np.testing.assert_array_equal(seen, [False, False, False, True])


@pytest.mark.parametrize("field", [90.0, 180.0, 220.0, 360.0])
def test_fisheye_is_equidistant(field):
    # r = f theta, and the smaller side spans the field of view
    a_lens = lens("fisheye", azimuth_deg=0.0, field_of_view_deg=field)
    focal = 40 / math.radians(field / 2)
    axis = direction(0.0, 0.0)
    for radius in (0.0, 3.0, 17.0, 39.9):
        for turn in (0.0, 1.0, 2.5, 4.4):
            ray, inside = pixel_directions(a_lens, 60 + radius * math.cos(turn), 40 + radius * math.sin(turn))
            assert inside
            assert angle_deg(ray, axis) == pytest.approx(math.degrees(radius / focal), abs=1e-9)
    assert not pixel_directions(a_lens, 60, 40 + 40.01)[1]
    beyond = direction(0.0, 0.0) if field == 360 else direction(field / 2 + 1.0, 0.0)
    assert direction_pixels(a_lens, beyond)[2] == (field == 360)


def test_fisheye_90_degree_marks():
    a_lens = lens("fisheye", azimuth_deg=0.0, elevation_deg=90.0, field_of_view_deg=180.0)
    # straight up with the top of the picture to the south; a map would have east on the other side
    x, y, _ = direction_pixels(a_lens, direction([0.0, 90.0, 180.0, 270.0], 0.0))
    np.testing.assert_allclose(x, [60, 100, 60, 20], atol=1e-9)
    np.testing.assert_allclose(y, [80, 40, 0, 40], atol=1e-9)


def test_panorama_is_equirectangular():
    a_lens = lens("panorama", azimuth_deg=200.0, width_px=360, height_px=180)
    for x, y in ((0.5, 0.5), (10.0, 90.0), (180.0, 45.0), (300.0, 170.0)):
        assert look(a_lens, x, y) == pytest.approx(((200 + x - 180) % 360, 90 - y))
    assert a_lens.pixel_rad == pytest.approx(math.radians(1))
    # a picture taller than half its width is black above and below
    tall = lens("panorama", width_px=100, height_px=80)
    assert list(pixel_directions(tall, 50.0, [14.0, 16.0, 64.0, 66.0])[1]) == [False, True, True, False]


@pytest.mark.parametrize("projection", PROJECTIONS)
@given(
    azimuth=st.floats(0, 360),
    elevation=angles,
    roll=st.floats(-180, 180),
    field=st.sampled_from([1.0, 40.0, 90.0, 140.0]),
)
def test_azimuth_span_holds_every_pixel(projection, azimuth, elevation, roll, field):
    a_lens = lens(
        projection, azimuth_deg=azimuth, elevation_deg=elevation, roll_deg=roll, field_of_view_deg=field, width_px=60
    )
    first, width = azimuth_span(a_lens)
    assert 0 < width <= 2 * math.pi
    directions, inside = row_directions(a_lens, 0, 80)
    x, y, _ = directions[inside].T
    past = (np.arctan2(x, y) - first) % (2 * math.pi)
    assert (past <= width + 1e-9).all()


def test_azimuth_span_of_a_narrow_view_is_narrow():
    first, width = azimuth_span(lens(azimuth_deg=1.0, field_of_view_deg=40.0))
    assert math.degrees(width) < 60
    assert -40 < math.degrees(first) < 0
