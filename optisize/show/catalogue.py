"""The catalogues in the terminal: measures and processes."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

from optisize.problem.own_measures import parameter_line
from optisize.process.card import Channel, Process, built_in_names, load_process
from optisize.process.characteristics import Characteristic, characteristic, lengths, parameters
from optisize.quantities import write
from optisize.show.terminal import print_table
from optisize.stage.measures import CATALOGUE, FIGURES, Measure, Parameter


def measure_records() -> list[dict[str, Any]]:
    """Return every measure as plain data."""
    return [
        {
            "name": name,
            "unit": m.unit,
            "better": m.better,
            "of": of,
            "definition": m.definition,
            "source": m.source,
            "parameters": [_parameter_record(p) for p in m.parameters],
        }
        for catalogue, of in ((CATALOGUE, "stage"), (FIGURES, "transistor"))
        for name, m in catalogue.items()
    ]


def _parameter_record(parameter: Parameter) -> dict[str, Any]:
    """Return a parameter as plain data, a bound that is open as nothing."""
    bounds = {"low": parameter.low, "high": parameter.high}
    return {**asdict(parameter), **{key: b if math.isfinite(b) else None for key, b in bounds.items()}}


def print_measures() -> None:
    """Print every measure with unit, sense, definition, parameters and source."""
    print_table("measures of a stage", ["measure", "unit", "better", "definition; source"], _rows(CATALOGUE), left=4)
    print_table(
        "\nfigures of each transistor, as goals or limits named like input.p.gm",
        ["figure", "unit", "better", "definition; source"],
        _rows(FIGURES),
        left=4,
    )


def _rows(catalogue: dict[str, Measure]) -> list[list[str]]:
    return [[name, m.unit, m.better, _text(m)] for name, m in catalogue.items()]


def _text(measure: Measure) -> str:
    """Return definition, parameters with their defaults, and source of a measure."""
    lines = "; ".join(map(parameter_line, measure.parameters))
    heading = "Parameter" if len(measure.parameters) == 1 else "Parameters"
    return f"{measure.definition}{f' {heading}: {lines}.' if lines else ''} ({measure.source})"


def process_records() -> list[dict[str, Any]]:
    """Return the built-in processes as plain data."""
    records = []
    for name in built_in_names():
        p = load_process(name)
        records.append({"name": name, "title": p.title, "law": p.law, "supply": p.nominal.supply, "note": p.note})
    return records


def print_processes() -> None:
    """Print the built-in processes."""
    rows = [[r["name"], r["law"], write(r["supply"], "V"), r["title"], r["note"]] for r in process_records()]
    print_table("built-in processes", ["name", "law", "supply", "title", "note"], rows, left=5)


def _characteristics(process: Process) -> list[Characteristic]:
    channels: tuple[Channel, ...] = ("n", "p")
    return [characteristic(process, channel, length) for channel in channels for length in lengths(process)]


def process_record(process: Process) -> dict[str, Any]:
    """Return a process as plain data: parameters in SI units, and its characteristics."""
    return {
        **process.model_dump(exclude={"table", "library"}),
        **(_table_record(process) if process.table or process.library else {}),
        "characteristics": [
            {
                "channel": c.channel,
                "length": c.length,
                "inversion": c.inversion.tolist(),
                "gm_over_id": c.gm_over_id.tolist(),
                "intrinsic_gain": c.intrinsic_gain.tolist(),
                "transit_frequency": c.transit_frequency.tolist(),
                "current_per_width": c.current_per_width.tolist(),
            }
            for c in _characteristics(process)
        ],
    }


def _table_record(process: Process) -> dict[str, Any]:
    """Return what there is of tables and library, as plain data."""
    record: dict[str, Any] = {"table": None, "library": None}
    if process.library is not None:
        record["library"] = process.library.model_dump(mode="json")
    if process.table is not None and process.tables is not None:
        record["table"] = {
            "file": str(process.table.file),
            "conditions": [{"corner": c.corner, "temperature": c.temperature} for c in process.tables.conditions],
            "lengths": {channel: s.lengths.tolist() for channel, s in process.tables.sizes.items()},
            "widths": {channel: s.widths.tolist() for channel, s in process.tables.sizes.items()},
            **process.tables.attributes,
        }
    return record


def _table_rows(process: Process) -> list[list[str]]:
    """Return what there is of tables, as rows of the table of parameters."""
    if process.tables is None:
        return []
    conditions = ", ".join(str(c) for c in process.tables.conditions)
    rows = [["table.conditions", conditions, "corners and temperatures that are tabulated"]]
    for channel, of in process.tables.sizes.items():
        for key, values, text in (("lengths", of.lengths, "channel lengths"), ("widths", of.widths, "finger widths")):
            ends = f"{write(float(values[0]), 'm')} to {write(float(values[-1]), 'm')}, {len(values)} of them"
            rows.append([f"table.{channel}mos.{key}", ends, f"tabulated {text}"])
    return rows


def print_process(name: str, process: Process) -> None:
    """Print every parameter of a process, and what its transistors can do."""
    rows = [[f"{p.table}.{p.name}", p.value, p.meaning] for p in parameters(process)] + _table_rows(process)
    print_table(f"{name}: {process.title}; {process.note}", ["parameter", "value", "meaning"], rows, left=3)
    shown = []
    for c in _characteristics(process):
        for k, level in enumerate(c.inversion):
            shown.append(
                [
                    f"{c.channel}mos" if k == 0 else "",
                    write(c.length, "m") if k == 0 else "",
                    f"{level:g}",
                    f"{c.gm_over_id[k]:.1f}",
                    f"{c.intrinsic_gain[k]:.0f}",
                    write(float(c.transit_frequency[k]), "Hz", 3),
                    write(float(c.current_per_width[k]) * 1e-6, "A", 3),
                ]
            )
    print_table(
        "\nsaturated transistors at the nominal temperature",
        ["device", "length", "inversion", "gm/I [1/V]", "gm/gds", "speed gm/(2 pi Cg)", "I per um of width"],
        shown,
        left=2,
    )
