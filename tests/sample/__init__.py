"""Tests of the sample soundings."""
