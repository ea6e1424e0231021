"""How a search went, as a figure."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from optisize.front.run import RECORDS, Run
from optisize.process.law import Array
from optisize.show.plots import pyplot, title_text

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@dataclass(frozen=True)
class History:
    """How a search went: hypervolume and feasible share over the evaluations."""

    evaluations: Array
    hypervolume: Array
    feasible_share: Array


def history(run: Run) -> History:
    """Return how the search went."""
    return History(*(run.history[c].to_numpy(dtype=float) for c in RECORDS))


def draw_history(run: Run) -> Figure:
    """Draw hypervolume and feasible share over the evaluations."""
    record = history(run)
    plt = pyplot()
    figure, spot = plt.subplots(figsize=(6.4, 4.0), layout="constrained")
    spot.plot(record.evaluations, record.hypervolume, color="#31688e", drawstyle="steps-post", label="hypervolume")
    spot.set_xlabel("evaluations")
    spot.set_ylabel("hypervolume of the archive, higher is better")
    spot.set_ylim(bottom=0)
    spot.set_xlim(left=0)
    other = spot.twinx()
    other.plot(record.evaluations, 100 * record.feasible_share, color="#b5367a", linestyle="--", label="feasible share")
    other.set_ylabel("feasible share of the population [%]")
    other.set_ylim(0, 105)
    lines = [*spot.get_lines(), *other.get_lines()]
    spot.legend(lines, [str(line.get_label()) for line in lines], loc="lower right", frameon=False)
    spot.grid(True, color="0.9", linewidth=0.6)
    figure.suptitle(f"Search history: {title_text(run.problem.title)}", fontsize=11)
    return figure
