"""Bytes to frames, one file a dialect; pure. See `frame` for the types and `dialects` for the table of dialects."""
