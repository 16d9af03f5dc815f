"""Widgets that draw numbers, traces and spectra from arrays."""
