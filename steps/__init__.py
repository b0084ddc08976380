"""Stripeline: from the raw records of a towed marine magnetometer survey to clean anomaly profiles."""

__version__ = "0.1.0"
