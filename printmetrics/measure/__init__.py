"""Kinds of feature: one module or folder each, and what they have in common."""
