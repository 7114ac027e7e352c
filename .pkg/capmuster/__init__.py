"""capmuster: every two-phase switched-capacitor converter for a rail, enumerated, sized and ranked.

What most programs need is here; it is loaded when it is first used.

    >>> import capmuster
    >>> capmuster.find_converter("I-G/O-I").ratio
    Fraction(2, 1)
    >>> frame = capmuster.shortlist(capmuster.load_brief("greenhouse-node"), top=5).frame
    >>> frame.attrs["units"]["area_mm2"]
    'mm2'
"""

from importlib import import_module
from typing import TYPE_CHECKING

from capmuster.rank._version import __version__

if TYPE_CHECKING:
    from capmuster.enumerate.errors import CapmusterError
    from capmuster.enumerate.wiring import Cell, Converter
    from capmuster.rank.discrete.choose import choose_parts
    from capmuster.rank.files.export import export
    from capmuster.rank.inputs.brief import Brief, load_brief
    from capmuster.rank.inputs.parts import load_stock
    from capmuster.rank.inputs.parts_request import PartsRequest
    from capmuster.rank.inputs.technology import Technology, load_technology
    from capmuster.rank.lookup import find_converter
    from capmuster.rank.scores.counting import count_census
    from capmuster.rank.scores.detail import detail
    from capmuster.rank.scores.listing import list_converters
    from capmuster.rank.scores.utilisation import charge_flow
    from capmuster.rank.shortlist import Shortlist, shortlist

__all__ = [
    "Brief",
    "CapmusterError",
    "Cell",
    "Converter",
    "PartsRequest",
    "Shortlist",
    "Technology",
    "__version__",
    "charge_flow",
    "choose_parts",
    "count_census",
    "detail",
    "export",
    "find_converter",
    "list_converters",
    "load_brief",
    "load_stock",
    "load_technology",
    "shortlist",
]

_HOME = {
    "Brief": "capmuster.rank.inputs.brief",
    "CapmusterError": "capmuster.enumerate.errors",
    "Cell": "capmuster.enumerate.wiring",
    "Converter": "capmuster.enumerate.wiring",
    "PartsRequest": "capmuster.rank.inputs.parts_request",
    "Shortlist": "capmuster.rank.shortlist",
    "Technology": "capmuster.rank.inputs.technology",
    "charge_flow": "capmuster.rank.scores.utilisation",
    "choose_parts": "capmuster.rank.discrete.choose",
    "count_census": "capmuster.rank.scores.counting",
    "detail": "capmuster.rank.scores.detail",
    "export": "capmuster.rank.files.export",
    "find_converter": "capmuster.rank.lookup",
    "list_converters": "capmuster.rank.scores.listing",
    "load_brief": "capmuster.rank.inputs.brief",
    "load_stock": "capmuster.rank.inputs.parts",
    "load_technology": "capmuster.rank.inputs.technology",
    "shortlist": "capmuster.rank.shortlist",
}


if not TYPE_CHECKING:  # a checker that saw it would let any name pass

    def __getattr__(name: str) -> object:
        """Load a public name from the module where it lives (PEP 562)."""
        home = _HOME.get(name)
        if home is None:
            raise AttributeError(f"module 'capmuster' has no attribute {name!r}")
        value = getattr(import_module(home), name)
        globals()[name] = value
        return value


def __dir__() -> list[str]:
    """List the public names, loaded or not."""
    return sorted({*globals(), *__all__})
