"""Recordings as streams of Blocks: CSV, WAV, COMTRADE, NPZ, captured bytes."""
