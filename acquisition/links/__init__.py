"""Where bytes come from, and the far ends that a simulated logger serves."""
