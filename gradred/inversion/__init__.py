"""Readings → density model: bodies and voxels, with their standard errors."""
