"""Discrete parts: the part and the count of every capacitor and switch, to proven optimality."""
