"""Scenes with known truth: exact edges, optics, pixels, light and noise. Shares no code with what measures."""

from printmetrics.synth.scene import Defect, Line, LineTruth, Scene, Truth, render

__all__ = ["Defect", "Line", "LineTruth", "Scene", "Truth", "render"]
