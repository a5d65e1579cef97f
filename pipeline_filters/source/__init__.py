"""The source: opening it, checking its time axis, reading and decoding slabs."""
