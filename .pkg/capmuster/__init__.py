"""capmuster: every two-phase switched-capacitor converter for a rail, enumerated, sized and ranked."""

from capmuster.rank._version import __version__

__all__ = ["__version__"]
