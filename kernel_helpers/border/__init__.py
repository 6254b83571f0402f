"""The border: time scales, Earth orientation, places, Earth and Sun, from libraries to plain arrays."""
