"""Drawings of one converter: potential diagrams, switch-level schematic, files, and text for a terminal.

Geometry comes first (`shapes`): every label and symbol has a box that is known before anything is rendered,
so that tests can prove that nothing overlaps. SVG, PNG and PDF are written from the same geometry.
"""
