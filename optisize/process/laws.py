"""The register of transistor laws: a new law is one entry here, and its own file."""

from __future__ import annotations

from dataclasses import dataclass

from optisize.process.charge import ChargeLaw, ChargeParameters
from optisize.process.law import Law
from optisize.process.parameters import TransistorParameters
from optisize.process.square import SquareLaw, SquareParameters
from optisize.process.table import TableLaw, TableParameters


@dataclass(frozen=True)
class LawEntry:
    """A law, the table of parameters that a process file gives for it, and one line on it."""

    law: type[Law]
    parameters: type[TransistorParameters] | type[TableParameters]
    summary: str


LAWS: dict[str, LawEntry] = {
    "square": LawEntry(SquareLaw, SquareParameters, "Shichman and Hodges 1968, the level-1 model of SPICE"),
    "charge": LawEntry(ChargeLaw, ChargeParameters, "Enz, Krummenacher and Vittoz 1995, all regions"),
    "table": LawEntry(TableLaw, TableParameters, "sampled transistors of a SPICE model library, splines between them"),
}
AnyParameters = SquareParameters | ChargeParameters | TableParameters
