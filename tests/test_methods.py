"""Which method serves which drops: the tabulated sizes hold when they are measured again, and are told to the user."""

import numpy as np
import pytest
from scene_files import toml, write
from switch_over import INDEX, Errors

from raytrace.data import read_table
from raytrace.optics.methods import AIRY, METHODS, RAYS, WAVES, choose, switch_over
from raytrace.report import scene_report
from raytrace.scene.load import load_scene

NEVER = 1e9
PATHS = 8


@pytest.fixture(scope="module")
def errors():
    # bows to p = 4; for p = 0 and 1 Airy's method is that of rays
    return Errors(paths=5)


def airy_from(p):
    return switch_over(PATHS, INDEX)[1][p]


@pytest.mark.parametrize("p", [2, 3])
def test_airy_bows_are_good_to_1_percent_from_their_size_on(errors, p):
    """Against the Debye series after the sun's disc (a slow twin, tests/switch_over.py)."""
    for larger in (1.0, 1.013, 1.3):
        assert errors.of(larger * airy_from(p))[0][p] < 0.01
    # and not later than need be
    assert errors.of(0.6 * airy_from(p))[0][p] > 0.01


def test_airy_bows_of_the_third_order(errors):
    assert errors.of(airy_from(4))[0][4] < 0.01


def test_rays_reflect_and_go_straight_through_from_x_2400_on(errors):
    """What Airy's method has for p = 0 and 1 are rays, in closed form."""
    rays = switch_over(PATHS, INDEX)[0]
    assert (rays[:2] == 2400).all()
    for x in (1000.0, 1300.0):
        assert (errors.of(x)[0][:2] < 0.01).all()


def test_no_rays_in_bows_of_any_size():
    """A bow of rays is endlessly bright at its edge; even the largest drops' bows are waves or Airy's."""
    assert (switch_over(PATHS, INDEX)[0][2:] >= NEVER).all()
    assert (choose("auto", [1e5], PATHS, INDEX)[0, 2:7] == AIRY).all()


def test_auto():
    chosen = choose("auto", [20.0, 999.0, 1001.0, 2399.0, 2401.0, 5001.0], PATHS, INDEX)
    assert chosen.shape == (6, PATHS)
    assert (chosen[:4, :2] == WAVES).all() and (chosen[4:, :2] == RAYS).all()
    assert chosen[:, 2].tolist() == [WAVES] * 4 + [AIRY] * 2
    assert chosen[:, 3].tolist() == [WAVES] * 5 + [AIRY]
    # larger drops never go back to a dearer method
    order = {WAVES: 2, AIRY: 1, RAYS: 0}
    cost = np.vectorize(order.get)(choose("auto", np.geomspace(0.02, 1e5, 200), PATHS, INDEX))
    assert (np.diff(cost, axis=0) <= 0).all()


@pytest.mark.parametrize("index", [1.2, 1.319, 1.354, 1.5])
def test_what_is_not_measured_is_left_to_the_waves(index):
    assert (choose("auto", [100.0, 1e5], PATHS, index) == WAVES).all()


def test_orders_beyond_the_measured_ones_are_left_to_the_waves():
    assert (choose("auto", [1e5], 12, INDEX)[0, 8:] == WAVES).all()
    assert (choose("auto", [1e5], 12, INDEX)[0, :8] == choose("auto", [1e5], 8, INDEX)[0]).all()


def test_one_method_for_all():
    for method, wanted in {"rays": [RAYS] * 4, "airy": [RAYS, RAYS, AIRY, AIRY], "waves": [WAVES] * 4}.items():
        assert choose(method, [1.0, 1e4], 4, INDEX).tolist() == [wanted] * 2


def test_unknown_method():
    with pytest.raises(ValueError, match="'mie' given; " + ", ".join(METHODS) + " work"):
        choose("mie", [1.0], 4, INDEX)


def test_sizes_in_use_are_not_below_those_measured():
    table = read_table("optics_methods")
    assert table["p"].tolist() == list(range(PATHS))
    for kind in ("rays", "airy"):
        used, measured = table[f"{kind}_from_x"], table[f"{kind}_within_x"]
        some = used < NEVER
        assert (used[some] >= measured[some]).all()


# --- what `check` prints


QUICK = "rays = 1000\nbins = 180\nwavelength_step_nm = 20\n"


def told(tmp_path, optics, rain):
    scene = load_scene(write(tmp_path, toml(optics=QUICK + optics, rain=rain)))
    lines = (line.split("  ", 1) for line in scene_report(scene, name="a.toml").splitlines())
    return {key.strip(): value.strip() for key, value in lines}


def limit_mm(x):
    return x * 550e-6 / np.pi


def test_check_tells_which_sizes_use_which(tmp_path):
    """Diameters are x times 550 nm over pi; the share of the cross-section is that of the gamma law (incomplete gamma
    function of scipy)."""
    from scipy.special import gammainc

    lines = told(tmp_path, 'method = "auto"', 'size_law = "marshall_palmer_1948"\nrain_rate_mm_h = 5.0')
    assert "cheapest method" in lines["rain method"]
    slope = 4.1 * 5.0**-0.21
    for p, x, above in ((0, 2400.0, "rays"), (2, airy_from(2), "Airy bows"), (4, airy_from(4), "Airy bows")):
        text = lines[f"rain p = {p}"]
        assert text.startswith(f"waves to {limit_mm(x):.3g} mm (") and text.endswith(f"{above} above")
        share = float(text.split("(")[1].split(" %")[0])
        assert share == pytest.approx(100 * gammainc(3, slope * limit_mm(x)), rel=0.02, abs=0.1)
    assert lines["rain p = 7"] == "waves for all sizes"


def test_check_tells_of_drops_of_one_size(tmp_path):
    lines = told(tmp_path, 'method = "auto"', 'size_law = "single"\ndiameter_mm = 0.5')
    assert lines["rain sizes"].startswith("p = 0 rays, p = 1 rays, p = 2 Airy bow, p = 3 waves")


def test_check_tells_of_fog(tmp_path):
    lines = told(tmp_path, 'method = "auto"', 'size_law = "deirmendjian_1969"')
    assert {lines[f"rain p = {p}"] for p in range(PATHS)} == {"waves for all sizes"}


@pytest.mark.parametrize("method", ["rays", "airy", "waves"])
def test_check_tells_of_one_method_for_all(tmp_path, method):
    lines = told(tmp_path, f'method = "{method}"', "")
    assert method in lines["rain method"].lower() and "all sizes" in lines["rain method"]
    assert "rain p = 0" not in lines
