"""Scanward: active impedance, reflection and embedded patterns of phased-array elements from one unit cell."""

__version__ = "0.1.0"
