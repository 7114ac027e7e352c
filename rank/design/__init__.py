"""Losses, objectives, device classes, switch trees, gate drive, tolerance and ripple of sized candidates."""
