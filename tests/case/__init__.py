"""Tests of the case folder and the case read from it."""
