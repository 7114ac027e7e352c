"""Everything about one converter that needs no technology, as rows and as JSON."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar

from capmuster.enumerate.families import family_names
from capmuster.rank.scores.utilisation import charge_flow

if TYPE_CHECKING:
    from fractions import Fraction

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.files.rows import Json
    from capmuster.rank.scores.switching import Cluster
    from capmuster.rank.scores.utilisation import ChargeFlow

_MOST_COMPARED_WITH_FAMILIES = 64


@dataclass(frozen=True, slots=True)
class Detail:
    """One converter, its charge flow and its families."""

    HEADER: ClassVar[tuple[str, ...]] = (
        "element", "kind", "positive node", "negative node", "closed in phase", "charge multiplier",
        "voltage",
    )  # fmt: skip

    converter: Converter
    flow: ChargeFlow
    families: tuple[str, ...]

    def rows(self) -> list[list[str]]:
        """Capacitors, then switches, under `HEADER`; a switch's voltage is the one that it blocks."""
        on = {plate: cluster.name for cluster in self.flow.network.clusters for plate in cluster.plates}
        capacitors = [
            [f"C{i + 1}", "capacitor", on[i, 1], on[i, -1], "", str(a), str(v)]
            for i, (a, v) in enumerate(zip(self.flow.multipliers, self.flow.voltages, strict=True))
        ]
        switches = [
            [s.name, "switch", *s.nodes, str(s.phase), str(s.multiplier), str(s.blocking_voltage)]
            for s in self.flow.network.switches
        ]
        return capacitors + switches

    def nodes(self) -> list[list[str]]:
        """Hard-wired nodes with their potentials in both phases, per volt of input."""
        return [
            [cluster.name, ", ".join(_plates(cluster)), *map(str, cluster.potentials)]
            for cluster in self.flow.network.clusters
        ]

    def figures(self) -> list[list[str]]:
        """Single figures: name and value."""
        flow = self.flow
        return [
            ["ratio M = V_out / V_in", str(self.converter.ratio)],
            ["families", ", ".join(self.families) or "none"],
            ["flying capacitors", str(self.converter.n)],
            ["switches", str(len(flow.network.switches))],
            ["capacitor utilisation", _share(flow.capacitor_utilisation)],
            ["switch utilisation", _share(flow.switch_utilisation)],
            ["slow-limit metric V_out^2 / (R_SSL f E_total)", _figure(flow.slow_limit_metric)],
            ["fast-limit metric V_out^2 / (R_FSL VA_total)", _figure(flow.fast_limit_metric)],
            ["output charge in phases 1, 2", ", ".join(map(str, flow.output_charges))],
            ["input charge in phases 1, 2", ", ".join(map(str, flow.input_charges))],
            ["input current in both phases", "yes" if flow.input_continuous else "no"],
            ["clean", "yes" if flow.network.clean else "no: a switch is idle or blocks no voltage"],
        ]

    def as_json(self) -> dict[str, Json]:
        """Exact figures as fraction strings."""
        flow = self.flow
        return {
            "id": self.converter.id,
            "wiring": self.converter.code,
            "ratio": str(self.converter.ratio),
            "capacitors": [
                {"name": f"C{i + 1}", "multiplier": str(a), "voltage": str(v)}
                for i, (a, v) in enumerate(zip(flow.multipliers, flow.voltages, strict=True))
            ],
            "switches": [
                {
                    "name": s.name,
                    "nodes": list(s.nodes),
                    "phase": s.phase,
                    "multiplier": str(s.multiplier),
                    "blocking_voltage": str(s.blocking_voltage),
                }
                for s in flow.network.switches
            ],
            "capacitor_utilisation": str(flow.capacitor_utilisation),
            "switch_utilisation": str(flow.switch_utilisation),
            "clean": flow.network.clean,
            "families": list(self.families),
            "nodes": [
                {
                    "name": cluster.name,
                    "port": cluster.port,
                    "plates": _plates(cluster),
                    "potentials": [str(u) for u in cluster.potentials],
                }
                for cluster in flow.network.clusters
            ],
        }


def detail(converter: Converter) -> Detail:
    """Work out what `show` shows.

    Raises
    ------
    IllPosedError
        When the converter is degenerate.
    """
    names = family_names(converter.n) if converter.n <= _MOST_COMPARED_WITH_FAMILIES else {}
    return Detail(converter, charge_flow(converter), names.get(converter.id, ()))


def _plates(cluster: Cluster) -> list[str]:
    return [f"C{i + 1}{'+' if sign > 0 else '-'}" for i, sign in cluster.plates]


def _share(value: Fraction) -> str:
    return f"{value} ({float(value):.1%})"


def _figure(value: Fraction | None) -> str:
    return "unbounded" if value is None else f"{value} ({float(value):.4g})"
