"""Invented circuits with closed-form truths, and the simulated logger that samples them."""
