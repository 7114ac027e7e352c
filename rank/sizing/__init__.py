"""Areas and frequency of a batch of candidates, with all losses counted and the optimum proven.

`size` takes a `LossModel` (the coefficients of N candidates) and a `Task` (an objective with its limits) and
returns a `Sizing`. The way there: `case` checks the task, `packing` arranges the elements, `start` guesses
prices, `newton` improves them on the equations of `problem`, and `certificate` bounds the optimum from both
sides.
"""

from capmuster.rank.sizing.batch import Prices, Sizing, Status, size
from capmuster.rank.sizing.model import Losses, LossModel, impedance, losses, mean_model
from capmuster.rank.sizing.task import Objective, Task, Use

__all__ = [
    "LossModel",
    "Losses",
    "Objective",
    "Prices",
    "Sizing",
    "Status",
    "Task",
    "Use",
    "impedance",
    "losses",
    "mean_model",
    "size",
]
