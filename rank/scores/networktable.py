"""The exact switches of one converter as a switch table, chains that the batch leaves open included."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.scores.switchtable import SwitchTable

if TYPE_CHECKING:
    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.scores.switching import SwitchNetwork


def network_table(table: ConverterTable, network: SwitchNetwork) -> SwitchTable:
    """Write the exact switches of the one converter of a table as a switch table, in their order."""
    output, scale = abs(int(table.port_charges[0, 2])), int(table.scale[0])
    switches = network.switches
    clusters = [[network.clusters[k] for k in switch.clusters] for switch in switches]

    def small(values: list[int]) -> np.ndarray[tuple[int, int], np.dtype[np.int8]]:
        return np.array([values], dtype=np.int8)

    return SwitchTable(
        charges=np.array([[int(s.multiplier * output) for s in switches]], dtype=np.int64),
        blocking=np.array([[int(s.blocking_voltage * scale) for s in switches]], dtype=np.int64),
        phase=small([s.phase for s in switches]),
        vertex=small([pair[0].vertices[s.phase - 1] for s, pair in zip(switches, clusters, strict=True)]),
        high=small([pair[0].vertices[2 - s.phase] for s, pair in zip(switches, clusters, strict=True)]),
        low=small([pair[1].vertices[2 - s.phase] for s, pair in zip(switches, clusters, strict=True)]),
        count=np.array([len(switches)]),
    )
