"""Scales: where they come from and how they are kept."""
