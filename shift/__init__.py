"""A watch over time: engine, events, snapshot and the words for them."""
