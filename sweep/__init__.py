"""Aperture Sweep: find, prove and record the f-stop and exposure of an inspection station."""

__version__ = "0.1.0"
