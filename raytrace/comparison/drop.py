"""A drop to compare bows of, where there is no scene: its size, its water, and the sun on it."""

from __future__ import annotations

import dataclasses
import math

from raytrace.errors import InputError


@dataclasses.dataclass(frozen=True)
class Drop:
    """One drop of fresh water in air, in sunlight.

    Attributes
    ----------
    diameter_mm : float
        0.02 to 8; in ray optics it matters through absorption only [mm].
    temperature_c : float
        Of the water, 0 to 50 [degC].
    sun_elevation_deg : float or None
        Above 0 to 90: the sunlight is what the default air leaves of it, and the bows have a place above the horizon.
        None: the sun is unattenuated [deg].
    refractive_index : float or None
        1.1 to 1.9: a fixed index for all wavelengths, in place of water's.

    Raises
    ------
    InputError
        If a value is not a finite number in its range.
    """

    diameter_mm: float = 1.0
    temperature_c: float = 20.0
    sun_elevation_deg: float | None = None
    refractive_index: float | None = None

    def __post_init__(self):
        problems = []
        for name, low, high, none in (
            ("diameter_mm", 0.02, 8.0, False),
            ("temperature_c", 0.0, 50.0, False),
            ("sun_elevation_deg", 0.0, 90.0, True),
            ("refractive_index", 1.1, 1.9, True),
        ):
            value = getattr(self, name)
            if value is None and none:
                continue
            number = isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
            if not number or not low <= value <= high or (name == "sun_elevation_deg" and value == 0):
                above = "above " if name == "sun_elevation_deg" else ""
                problems.append(
                    f"{name}: {value!r} given, which is out of range; what works: {above}{low:g} to {high:g}"
                )
        if problems:
            raise InputError(*problems)

    def scene(self):
        """A scene that holds this drop alone, with default air."""
        from raytrace.scene.load import scene_from_dict

        elevation = 90.0 if self.sun_elevation_deg is None else float(self.sun_elevation_deg)
        rain = {"size_law": "single", "diameter_mm": float(self.diameter_mm), "extinction_per_km": 1.0}
        rain["temperature_c"] = float(self.temperature_c)
        if self.refractive_index is not None:
            rain["refractive_index"] = float(self.refractive_index)
        return scene_from_dict({"sun": {"elevation_deg": elevation, "azimuth_deg": 180.0}, "rain": rain, "camera": {}})
