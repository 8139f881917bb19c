"""Which keys of a table [rain] go with which size law: what is checked, and the choices of `size_law`."""

from __future__ import annotations

from typing import NamedTuple


class LawKeys(NamedTuple):
    """Keys of one size law.

    Attributes
    ----------
    needs : tuple of str
        Keys that must be given.
    takes : tuple of str
        Keys that may be given.
    amounts : tuple of str
        Keys that may say how much water there is; at most one of them, but for `rate_shapes`.
    rate_shapes : bool
        Whether the rain rate sets the sizes, so that it may stand beside another amount.
    """

    needs: tuple[str, ...]
    takes: tuple[str, ...] = ()
    amounts: tuple[str, ...] = ("rain_rate_mm_h", "extinction_per_km", "liquid_water_g_m3")
    rate_shapes: bool = False


SIZE_LAW_KEYS = {
    "marshall_palmer_1948": LawKeys((), rate_shapes=True),
    "ulbrich_1983": LawKeys(("median_diameter_mm",), ("shape_mu",)),
    "lognormal": LawKeys(("median_diameter_mm", "geometric_standard_deviation")),
    # the drops of clouds and fog hang in the air
    "deirmendjian_1969": LawKeys(
        (), ("effective_radius_um", "effective_variance"), ("extinction_per_km", "liquid_water_g_m3")
    ),
    "single": LawKeys(("diameter_mm",), ("relative_spread",)),
    "table": LawKeys(("size_table",)),
}
"""Size laws by their names in the scene file; `drops.sizes.SIZE_LAWS` has the functions of the same names."""

SHAPE_KEYS = tuple(sorted({key for law in SIZE_LAW_KEYS.values() for key in (*law.needs, *law.takes)}))
"""Keys that belong to some size law and mean nothing to others."""
