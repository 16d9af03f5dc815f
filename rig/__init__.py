"""The site's setup: channels, dividers, clamps; turns a Block into a Waveform."""
