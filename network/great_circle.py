"""Distances along great circles."""

from __future__ import annotations

import numpy as np

from network.arrays import FloatArray

__all__ = ["EARTH_RADIUS_KM", "great_circle"]

EARTH_RADIUS_KM = 6371.0088
"""Mean radius of the Earth, kilometres (IUGG; from memory)."""


def great_circle(lat_a: FloatArray, lon_a: FloatArray, lat_b: FloatArray, lon_b: FloatArray) -> FloatArray:
    """Great-circle distance by the haversine formula.

    Parameters
    ----------
    lat_a, lon_a, lat_b, lon_b
        Coordinates in degrees; they broadcast.

    Returns
    -------
    FloatArray
        Kilometres; NaN where a coordinate is.

    Examples
    --------
    >>> float(great_circle(np.zeros(1), np.zeros(1), np.zeros(1), np.full(1, 90.0))[0]) / EARTH_RADIUS_KM * 2 / np.pi
    1.0
    """
    phi_a, lam_a, phi_b, lam_b = (np.radians(angle) for angle in (lat_a, lon_a, lat_b, lon_b))
    half = np.sin((phi_b - phi_a) / 2) ** 2 + np.cos(phi_a) * np.cos(phi_b) * np.sin((lam_b - lam_a) / 2) ** 2
    return np.asarray(2 * EARTH_RADIUS_KM * np.arcsin(np.sqrt(np.minimum(half, 1.0))))
