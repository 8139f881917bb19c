"""What a comparison may be asked: limits in one place, for Python, for the command line, and for their messages."""

from __future__ import annotations

import math
import numbers

from raytrace.errors import InputError
from raytrace.optics.methods import METHODS
from raytrace.scene.problems import quoted

MOST_ORDERS = 12
# Rays of the first round, and at most, at 550 nm and at each wavelength of the spectrum
FIRST_RAYS = (200_000, 24_000)
MOST_RAYS = (200_000_000, 6_000_000)
_MOST_THREADS = 1024
# Of a drop: lowest, highest, whether the lowest is left out, whether there may be none
DROP_RANGES = {
    "diameter_mm": (0.002, 8.0, False, False),
    "temperature_c": (0.0, 50.0, False, False),
    "sun_elevation_deg": (0.0, 90.0, True, True),
    "refractive_index": (1.1, 1.9, False, True),
}
WORKS = {
    "orders": f"a whole number from 1 to {MOST_ORDERS}",
    "tolerance": "a number above 0 to 0.5",
    "seed": f"a whole number from 0 to {2**63 - 1}",
    "threads": f"a whole number from 1 to {_MOST_THREADS}",
    "method": " or ".join(f'"{name}"' for name in METHODS),
    "most_rays": f"two whole numbers from {FIRST_RAYS[0]} and {FIRST_RAYS[1]}, the first round",
} | {
    name: f"a number {'above' if above else 'from'} {low:g} to {high:g}"
    for name, (low, high, above, _) in DROP_RANGES.items()
}


def check_drop(values: dict) -> None:
    """Refuse what cannot be a drop.

    Raises
    ------
    InputError
        A line for each value that is not a finite number in its range.
    """
    problems = []
    for name, (low, high, above, none) in DROP_RANGES.items():
        value = values[name]
        if value is None and none:
            continue
        if not (_is_number(value) and low <= value <= high) or (above and value == low):
            problems.append(_out_of_range(name, value))
    if problems:
        raise InputError(*problems)


def check_asked(*, orders, tolerance, seed, threads, most_rays, method=None) -> None:
    """Refuse what a comparison cannot do.

    Raises
    ------
    InputError
        A line for each argument that is out of range.
    """
    sound = {
        "orders": (orders, _is_whole(orders) and 1 <= orders <= MOST_ORDERS),
        "tolerance": (tolerance, _is_number(tolerance) and 0 < tolerance <= 0.5),
        "seed": (seed, seed is None or (_is_whole(seed) and 0 <= seed < 2**63)),
        "threads": (threads, threads is None or (_is_whole(threads) and 1 <= threads <= _MOST_THREADS)),
        "most_rays": (most_rays, _are_rays(most_rays)),
        "method": (method, method is None or (isinstance(method, str) and method in METHODS)),
    }
    problems = [_out_of_range(name, value) for name, (value, works) in sound.items() if not works]
    if problems:
        raise InputError(*problems)


def shown(value) -> str:
    """Any value on one short line."""
    if _is_whole(value) and abs(value) >= 10**20:
        # Python refuses to print very long ones
        return f"a whole number of {int(value).bit_length()} bits"
    return quoted(repr(value))


def _out_of_range(name, value) -> str:
    return f"{name}: {shown(value)} given, which is out of range; what works: {WORKS[name]}"


def _is_whole(value) -> bool:
    return isinstance(value, numbers.Integral) and not isinstance(value, bool)


def _is_number(value) -> bool:
    try:
        return isinstance(value, numbers.Real) and not isinstance(value, bool) and math.isfinite(value)
    except OverflowError:
        return False


def _are_rays(value) -> bool:
    return (
        isinstance(value, (tuple, list))
        and len(value) == 2
        and all(_is_whole(rays) and rays >= first for rays, first in zip(value, FIRST_RAYS, strict=True))
    )
