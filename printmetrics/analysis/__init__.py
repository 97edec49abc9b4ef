"""Pixels in, pixels out: no units, no files, no state."""
