"""Pure numbers: windows, frequency, amplitude, harmonics, power, meters, verdict."""
