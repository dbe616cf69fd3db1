"""Errors and findings, unit conversions, random streams: used by every other folder."""
