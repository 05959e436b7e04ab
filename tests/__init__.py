"""Tests of bendcast; the tree mirrors the package."""
