"""Refraction physics on plain arrays: no files, no labels, no plotting.

Kernels take and return numpy arrays in SI units (N and M in N- and M-units). The one labelled
face is `forecast.physics.columns`.
"""
