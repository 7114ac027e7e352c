"""Shortlist pages to test with: made up, apart from the converters, and with texts that try to be markup."""

from __future__ import annotations

from random import Random

import numpy as np

from capmuster.enumerate.converters import converters
from capmuster.enumerate.families import fibonacci
from capmuster.rank.drawing.sheet import potential_diagram
from capmuster.rank.page.data import (
    BINS,
    Candidate,
    Cell,
    ImpedanceCurve,
    Listing,
    LossBar,
    PageColumn,
    PageData,
    Population,
)

HOSTILE = "<script>window.hacked = 1</script><img src=x onerror='window.hacked = 2'>\"'&amp;</title>"

COLUMNS = (
    PageColumn("place", "place", "", "place in the ranking", "number"),
    PageColumn("id", "id", "", "short id", "name"),
    PageColumn("families", "families", "", "families", "text"),
    PageColumn("switches", "switches", "", "number of switches", "number"),
    PageColumn("area", "area", "mm²", "area that meets the droop", "number"),
    PageColumn("share", "capacitor utilisation", "%", "share", "share"),
    PageColumn("pareto", "Pareto", "", "in the Pareto set", "flag"),
    PageColumn("wiring", "wiring", "", "wiring code", "text", shown=False),
    PageColumn("droop", "droop", "V", "droop at the load", "number", shown=False),
)


def example(count: int = 12, capacitors: int = 4, *, title: str = "Greenhouse node") -> PageData:
    """Return a page of so many candidates with so many capacitors each."""
    random = Random(11)  # noqa: S311 -- made-up values, the same on every run
    candidates = tuple(_candidate(random, k, capacitors) for k in range(count))
    counts = np.array([[random.choice((0, 0, 1, 5, 40, 2000)) for _ in range(BINS)] for _ in range(BINS)])
    return PageData(
        title=title,
        cautions=("56 V is above what is safe in wet places.", f"Mind {HOSTILE}"),
        assumptions=(("input", "3 V to 4.2 V"), ("technology", HOSTILE)),
        findings=("Searched: complete up to 4 flying capacitors.", f"Included {HOSTILE}"),
        columns=COLUMNS,
        candidates=candidates,
        efficiency_label="efficiency",
        others=np.array([[random.uniform(4.0, 9.0), random.uniform(0.7, 0.95)] for _ in range(40)]),
        population=Population(counts, "All converters there are."),
        provenance=(("capmuster", "0"), ("brief", HOSTILE)),
    )


def _candidate(random: Random, k: int, capacitors: int) -> Candidate:
    if capacitors <= 4:
        table = converters(capacitors)
        converter = table.converter(random.randrange(len(table)))
    else:
        converter = fibonacci(capacitors)
    # Each id must be its own, also where the same converter is taken twice.
    name = f"{capacitors}-{k:03d}{converter.id[-3:]}"
    area, switches = 1.0 + 0.37 * k + random.random(), random.randrange(4, 14)
    share, efficiency = random.uniform(0.2, 1.0), random.choice((0.8, 0.86, 0.91))
    families = ("", "ladder", "series-parallel, Dickson", f"odd {HOSTILE}")[k % 4]
    pareto = k % 5 == 0
    values = (
        Cell(str(k + 1), k + 1.0),
        Cell(name),
        Cell(families),
        Cell(str(switches), float(switches)),
        Cell(f"{area:.4g}", area),
        Cell(f"{100 * share:.1f}", 100 * share),
        Cell("yes" if pareto else "", float(pareto)),
        Cell(converter.code),
        Cell(f"{0.01 * k:.4g}", 0.01 * k),
    )
    frequency = np.logspace(5.0, 8.0, 61)
    slow, fast = 3.0e6 / frequency, np.full(61, 0.6)
    return Candidate(
        id=name,
        place=k + 1,
        wiring=converter.code,
        cells=values,
        area=area,
        efficiency=efficiency,
        capacitor_utilisation=share,
        switch_utilisation=random.uniform(0.2, 1.0),
        pareto=pareto,
        family=bool(families),
        diagram=potential_diagram(converter),
        elements=Listing(
            ("element", "class", "area [mm²]"),
            tuple((f"C{i + 1}", HOSTILE if i == 0 else "mim", "0.12") for i in range(converter.n)),
            (False, False, True),
        ),
        losses=(
            LossBar("at 3 V input", (("slow limit", 0.004), ("fast limit", 0.002), ("gate drive", 0.001))),
            LossBar("at 4.2 V input", (("slow limit", 0.004), ("fast limit", 0.002), ("gate drive", 0.003))),
        ),
        curve=ImpedanceCurve(frequency, np.hypot(slow, fast), slow, fast, 5.0e6, 0.9),
    )
