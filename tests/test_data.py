"""The tables: cited, listed, sound, and equal to what they were taken from."""

import re
import warnings

import numpy as np
import pytest

from raytrace.data import FOLDER, read_table

TABLES = sorted(path.stem for path in FOLDER.glob("*.csv"))


def test_there_are_tables_to_check():
    assert len(TABLES) >= 5


@pytest.mark.parametrize("name", TABLES)
def test_table_is_cited_and_listed(name):
    text = (FOLDER / f"{name}.csv").read_text(encoding="utf-8")
    head = "".join(line for line in text.splitlines(keepends=True) if line.startswith("#"))
    assert "# source:" in head
    assert re.search("published|quoted|recomputed|from memory", head), f"{name} does not say how certain it is"
    assert f"`{name}.csv`" in (FOLDER / "README.md").read_text(encoding="utf-8")


def test_readme_lists_no_table_that_is_not_there():
    lines = (FOLDER / "README.md").read_text(encoding="utf-8").splitlines()
    listed = [line.split("`")[1] for line in lines if line.startswith("| `")]
    assert sorted(listed) == [f"{name}.csv" for name in TABLES]


@pytest.mark.parametrize("name", TABLES)
def test_table_is_finite_ordered_and_read_only(name):
    table = read_table(name)
    for column, values in table.items():
        if column != "certainty":
            assert np.isfinite(values).all()
            with pytest.raises(ValueError, match="read-only"):
                values[0] = 0
    first = next(iter(table.values()))
    assert (np.diff(first) > 0).all()


def test_unknown_table_is_refused():
    with pytest.raises(FileNotFoundError):
        read_table("no_such_table")


def test_colour_matching_functions_equal_colour_science():
    # ISO/CIE 11664-1:2019 through colour-science: every digit.
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import colour

        observer = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
    table = read_table("cie_1931_2deg")
    np.testing.assert_array_equal(table["wavelength_nm"], observer.wavelengths)
    np.testing.assert_array_equal(np.stack([table[c] for c in ("x_bar", "y_bar", "z_bar")], axis=1), observer.values)


def test_hale_querry_1973_four_rows():
    # Hale & Querry 1973, quoted independently of the table's own source.
    table = read_table("hale_querry_1973")
    rows = dict(zip(table["wavelength_nm"], table["k"], strict=True))
    assert [rows[w] for w in (400, 500, 600, 700)] == [1.86e-9, 1.00e-9, 1.09e-8, 3.35e-8]
    assert set(table["certainty"]) == {"quoted"}


def test_neckel_labs_1994_five_rows():
    # Neckel & Labs 1994, quoted independently of the table's own source.
    quoted = {
        401.970: (0.12323, 1.08648, -0.43974, 0.45912, -0.32759, 0.09850),
        492.905: (0.20924, 1.30798, -1.20411, 1.21505, -0.67196, 0.14381),
        559.950: (0.26892, 1.34319, -1.58427, 1.91271, -1.31350, 0.37295),
        640.970: (0.33644, 1.30590, -1.79238, 2.45040, -1.89979, 0.59943),
        700.875: (0.37885, 1.25553, -1.70908, 2.19647, -1.59554, 0.47378),
    }
    table = read_table("neckel_labs_1994")
    for wavelength, coefficients in quoted.items():
        (row,) = np.flatnonzero(table["wavelength_nm"] == wavelength)
        assert tuple(table[f"a{j}"][row] for j in range(6)) == coefficients
