"""Tests of the scripts beside the package."""
