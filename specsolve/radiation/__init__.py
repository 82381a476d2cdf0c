"""Radiative transfer in plane-parallel layers: Planck function, formal solution, moments."""
