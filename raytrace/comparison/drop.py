"""A drop to compare bows of, where there is no scene: its size, its water, and the sun on it."""

from __future__ import annotations

import dataclasses

from raytrace.comparison.asked import check_drop


@dataclasses.dataclass(frozen=True)
class Drop:
    """One drop of fresh water in air, in sunlight.

    Attributes
    ----------
    diameter_mm : float
        0.002 to 8; in ray optics it matters through absorption only [mm].
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
        check_drop({field.name: getattr(self, field.name) for field in dataclasses.fields(self)})

    def scene(self):
        """A scene that holds this drop alone, with default air."""
        from raytrace.scene.load import scene_from_dict

        elevation = 90.0 if self.sun_elevation_deg is None else float(self.sun_elevation_deg)
        rain = {"size_law": "single", "diameter_mm": float(self.diameter_mm), "extinction_per_km": 1.0}
        rain["temperature_c"] = float(self.temperature_c)
        if self.refractive_index is not None:
            rain["refractive_index"] = float(self.refractive_index)
        return scene_from_dict({"sun": {"elevation_deg": elevation, "azimuth_deg": 180.0}, "rain": rain, "camera": {}})
