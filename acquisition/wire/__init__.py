"""Wire formats: pure decoders and their encoders."""
