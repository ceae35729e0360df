"""Tests of the report: what stands in it, and what a browser makes of it."""
