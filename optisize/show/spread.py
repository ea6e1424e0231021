"""The spread of a design: in the terminal, as plain data, and as histograms."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from optisize.front.spread import CONFIDENCE, Distribution, Spread, Yield, counts_sigmas
from optisize.problem.own_measures import label as label_of
from optisize.process.law import Array
from optisize.quantities import write
from optisize.show.plots import heading, panels, readable, title_text
from optisize.show.terminal import StatusLine, console, json_number, print_caution, print_table
from optisize.stage.catalogue import Measure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

BARS = " ▁▂▃▄▅▆▇█"
BAR_BINS = 24


class Counter(StatusLine):
    """Shows how many samples, or other things, are done, once it takes longer than two seconds."""

    def __init__(self, samples: int, quiet: bool, words: str = "samples") -> None:
        """Prepare for a number of samples."""
        super().__init__(quiet, patience=2.0)
        self._samples, self._words = samples, words

    def __call__(self, done: int) -> None:
        """Show the number, if it is time to."""
        if self.due:
            self.show(f"{self._words} {done}/{self._samples}")


def bars(found: Distribution, bins: int = BAR_BINS) -> str:
    """Return a histogram as a line of blocks, from the lowest sample to the highest."""
    _, counts = found.histogram(bins)
    if not len(counts) or not found.sigma > 0.0:
        return ""
    return "".join(BARS[int(np.ceil(count / counts.max() * (len(BARS) - 1)))] for count in counts)


def sample_label(measure: Measure) -> str:
    """Return what to call a measure of samples: one that counts standard deviations reads what a sample has itself."""
    return f"{measure.name} (of each)" if counts_sigmas(measure) else label_of(measure)


def print_spread(found: Spread, label: str) -> None:
    """Print distributions, yields and the first-order prediction."""
    rows = []
    for d in found.distributions:
        unit = d.measure.unit
        figures = (d.matched, d.mean, d.sigma, d.linear_sigma, *d.quantiles)
        rows.append([sample_label(d.measure), *(write(x, unit) for x in figures), bars(d)])
    headings = ["measure", "matched", "mean", "sigma", "sigma, first order", "0.135 %", "median", "99.865 %", "samples"]
    print_table(f"{found.problem.title}: {label}, {found.samples} samples of mismatch", headings, rows, left=1)
    rows = [[y.name, str(y.passed), *_percent(y)] for y in found.yields]
    interval = f"{100 * CONFIDENCE:g} % interval"
    print_table("\nyield against the limits", ["limit", "passed", "yield", interval, "first order"], rows)
    out = console()
    if found.unsolved:
        out.print(f"{found.unsolved} samples have no operating point with the output where it is without mismatch")
    out.print(f"interval: Clopper and Pearson; seed {found.seed}; each sample's offset is taken out by the input")
    print_caution()


def _percent(y: Yield) -> list[str]:
    low, high = y.interval
    return [f"{100 * y.share:.2f} %", f"{100 * low:.2f} to {100 * high:.2f} %", f"{100 * y.linear:.2f} %"]


def spread_record(found: Spread) -> dict[str, Any]:
    """Return the spread as plain data in SI units."""

    def record(d: Distribution) -> dict[str, Any]:
        edges, counts = d.histogram()
        low, median, high = (json_number(q) for q in d.quantiles)
        figures = {"matched": d.matched, "mean": d.mean, "sigma": d.sigma, "sigma_first_order": d.linear_sigma}
        return {
            "unit": d.measure.unit,
            **{key: json_number(value) for key, value in figures.items()},
            "quantiles": {"0.00135": low, "0.5": median, "0.99865": high},
            "histogram": {"edges": edges.tolist(), "counts": counts.tolist()},
        }

    return {
        "samples": found.samples,
        "seed": found.seed,
        "unsolved": found.unsolved,
        "measures": {d.measure.name: record(d) for d in found.distributions},
        "yield": {
            y.name: {"passed": y.passed, "yield": y.share, "interval": list(y.interval), "first_order": y.linear}
            for y in found.yields
        },
    }


@dataclass(frozen=True)
class Histogram:
    """One measure over the samples, as it is drawn.

    Attributes:
        label: name, settings of its parameters, and unit.
        better: ``max``, ``min`` or, of a signed figure, ``zero``.
        edges, counts: of the bins, (B + 1,) and (B,), in that unit.
        linear: counts of the same samples to first order, (B,).
        matched: the value without mismatch.
        bounds: limits on the measure.
    """

    label: str
    better: str
    edges: Array
    counts: Array
    linear: Array
    matched: float
    bounds: tuple[tuple[str, float], ...]


def histograms(found: Spread) -> list[Histogram]:
    """Return the histogram of every measure that varies."""
    return [_histogram(d, found) for d in found.distributions if d.sigma > 0.0]


def _histogram(d: Distribution, found: Spread) -> Histogram:
    factor, unit = readable(d.finite, d.measure.unit)
    edges, counts = d.histogram()
    linear, _ = np.histogram(d.linear[np.isfinite(d.linear)], bins=edges)
    name = sample_label(d.measure).replace("_", " ")
    limits = [b for x in found.problem.limits if x.measure.name == d.measure.name for b in x.bounds]
    return Histogram(
        label=f"{name} [{unit}]" if unit else name,
        better=_better(d.measure, found),
        edges=edges / factor,
        counts=counts.astype(float),
        linear=linear.astype(float),
        matched=d.matched / factor,
        bounds=tuple((name, bound / factor) for name, bound in limits),
    )


def _better(measure: Measure, found: Spread) -> str:
    sense = next((g.sense for g in found.problem.goals if g.measure.name == measure.name), measure.better)
    return "zero" if measure.signed and sense == "min" else sense


def draw_spread(found: Spread, label: str) -> Figure:
    """Draw the histogram of every measure that varies."""
    shown = histograms(found)
    figure, spots = panels(len(shown), 3, 4.6)
    for spot, histogram in zip(spots, shown, strict=True):
        _draw(spot, histogram)
    everything = found.yields[-1]
    figure.suptitle(
        f"{title_text(found.problem.title)}\n{title_text(label)}: {found.samples} samples of mismatch, "
        f"{100 * everything.share:.2f} % meet every limit",
        fontsize=11,
    )
    return figure


def _draw(spot: Axes, shown: Histogram) -> None:
    from matplotlib.ticker import MaxNLocator

    spot.stairs(shown.counts, shown.edges, fill=True, color="#8fb8d8", label="samples")
    spot.stairs(shown.linear, shown.edges, color="#1f3a52", linewidth=1.3, label="to first order")
    if np.isfinite(shown.matched):
        spot.axvline(shown.matched, color="0.25", linestyle=":", linewidth=1.2, label="without mismatch")
    low, high = shown.edges[0], shown.edges[-1]
    for name, bound in shown.bounds:
        if low - 0.5 * (high - low) <= bound <= high + 0.5 * (high - low):
            spot.axvline(bound, color="#b5367a", linestyle="--", linewidth=1.2, label=f"limit: {name} {bound:g}")
    spot.set_xlabel(heading(shown.label, shown.better))
    spot.set_ylabel("samples in a bin")
    spot.xaxis.set_major_locator(MaxNLocator(nbins=5))
    spot.set_ylim(top=1.35 * float(max(shown.counts.max(), shown.linear.max())))
    spot.legend(fontsize=7, framealpha=0.9, edgecolor="none", loc="upper right", ncols=2)
    spot.grid(True, color="0.9", linewidth=0.6)
    spot.set_axisbelow(True)
