"""Write the shortlist page: one HTML file that asks for nothing else.

All text is escaped by the template engine. The page's own policy lets only its one script run, by its hash,
so that even markup that slipped through could do nothing.
"""

from __future__ import annotations

import base64
import hashlib
from importlib.resources import files
from typing import TYPE_CHECKING

from capmuster.rank.drawing.svg import INLINE, svg
from capmuster.rank.page.plots import (
    area_efficiency_plot,
    impedance_plot,
    loss_plot,
    population_plot,
)

if TYPE_CHECKING:
    from capmuster.rank.page.data import PageData


def render_page(data: PageData) -> str:
    """Return the page as HTML text; the same data gives the same text."""
    from jinja2 import Environment, StrictUndefined  # noqa: PLC0415 -- only for those who write a page
    from markupsafe import Markup  # noqa: PLC0415

    def resource(name: str) -> str:
        return files("capmuster.rank.page").joinpath(name).read_text("utf-8")

    def own(text: str) -> Markup:
        return Markup(text)  # noqa: S704 -- written by this package, texts in it escaped there

    environment = Environment(
        autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    script = resource("page.js")
    shown = data.candidates
    return environment.from_string(resource("page.html.j2")).render(
        data=data,
        style=own(resource("page.css")),
        script=own(script),
        script_hash=base64.b64encode(hashlib.sha256(script.encode()).digest()).decode(),
        area_plot=own(area_efficiency_plot(shown, data.others, data.efficiency_label)) if shown else "",
        population_plot=own(population_plot(data.population, shown)) if shown else "",
        diagrams=[own(svg(one.diagram, INLINE, inline=True)) for one in shown],
        losses=[own(loss_plot(one.losses)) for one in shown],
        curves=[own(impedance_plot(one.curve)) if one.curve else "" for one in shown],
    )
