"""The SPICE model library of a process: where it is, and how a deck names its transistors.

A transistor of F fingers in U units is written as F U parallel devices of one finger each: the width of one finger, one
finger, the multiple F U, and the areas and edges of the junctions of one finger. Tables are taken of the same device.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field

from optisize.errors import InputError, listing, nearest
from optisize.process.parameters import Parameters
from optisize.quantities import In

Name = Annotated[str, Field(min_length=1, max_length=100, pattern=r"^[A-Za-z_][A-Za-z0-9_.]*$")]
Key = Annotated[str, Field(max_length=40, pattern=r"^([A-Za-z_][A-Za-z0-9_]*)?$")]
Section = Annotated[str, Field(max_length=100, pattern=r"^[A-Za-z0-9_.\-]*$")]


class LibraryDevice(Parameters):
    """How a deck names one kind of transistor; a key that is empty is one that the device does not have."""

    name: Annotated[Name, Field(description="subcircuit or model")]
    kind: Annotated[
        Literal["subcircuit", "model"], Field(description="subcircuit (called with X) or model (called with M)")
    ] = "subcircuit"
    inner: Annotated[
        str,
        Field(
            max_length=100,
            pattern=r"^[A-Za-z0-9_.]*$",
            description="path from the subcircuit to the transistor in it whose operating point is read, such as m0",
        ),
    ] = ""
    width: Annotated[Key, Field(min_length=1, description="key of the width of one finger")] = "w"
    length: Annotated[Key, Field(min_length=1, description="key of the channel length")] = "l"
    fingers: Annotated[Key, Field(description="key of the fingers, always given as one")] = "nf"
    multiple: Annotated[Key, Field(min_length=1, description="key of the number of devices in parallel")] = "m"
    drain_area: Annotated[Key, Field(description="key of the drain's junction area")] = "ad"
    source_area: Annotated[Key, Field(description="key of the source's junction area")] = "as"
    drain_edge: Annotated[Key, Field(description="key of the drain's junction perimeter")] = "pd"
    source_edge: Annotated[Key, Field(description="key of the source's junction perimeter")] = "ps"
    gate_edge: Annotated[
        bool, Field(description="whether these perimeters count the edge under the gate, as BSIM4 does by default")
    ] = True
    terminals: Annotated[
        str, Field(pattern=r"^[dgsb]{4}$", description="order of drain, gate, source and bulk in a call")
    ] = "dgsb"
    extra: Annotated[
        str, Field(max_length=200, pattern=r"^[ -~]*$", description="what else a call has to say, such as sa=0")
    ] = ""

    def call(self, name: str, nodes: Mapping[str, str], shape: Mapping[str, float], unit: float = 1.0) -> str:
        """Return the line that calls one transistor.

        Args:
            name: of the instance, without its letter.
            nodes: of ``d``, ``g``, ``s`` and ``b``.
            shape: in SI units, by the names of the keys' fields: `width` of one finger, `length`, `multiple`, and the
                junctions of one finger without their gate edge: `drain_area`, `source_area`, `drain_edge`,
                `source_edge`.
            unit: of the library's lengths [m].
        """
        ends = " ".join(nodes[t] for t in self.terminals)
        given: dict[str, float] = {self.width: shape["width"] / unit, self.length: shape["length"] / unit}
        for field in ("drain_area", "source_area"):
            given[getattr(self, field)] = shape.get(field, 0.0) / unit**2
        gate = shape["width"] if self.gate_edge else 0.0
        for field in ("drain_edge", "source_edge"):
            given[getattr(self, field)] = (shape.get(field, 0.0) + gate) / unit
        given[self.fingers] = 1.0
        given[self.multiple] = shape.get("multiple", 1.0)
        keys = " ".join(f"{key}={value:.12g}" for key, value in given.items() if key)
        letter = "x" if self.kind == "subcircuit" else "m"
        return " ".join(f"{letter}{name} {ends} {self.name} {keys} {self.extra}".split())

    def vector(self, name: str, figure: str) -> str:
        """Return how the simulator names a figure of the operating point of an instance: ``@m.x1.m0[gm]``."""
        if self.kind == "model":
            return f"@m{name}[{figure}]"
        return f"@m.x{name}.{self.inner}[{figure}]".lower()


class Library(Parameters):
    """A SPICE model library, read by ``.lib path section``, or by ``.include path`` where a section is empty."""

    path: Annotated[Path, Field(description="the library, beside the process file unless absolute")]
    sha256: Annotated[
        str, Field(pattern=r"^([0-9a-f]{64})?$", description="hash of the library when the table was made")
    ] = ""
    init_sections: Annotated[
        tuple[Section, ...], Field(description="sections that every deck reads, before that of the corner")
    ] = ()
    sections: Annotated[dict[str, Section], Field(min_length=1, description="the section of each corner")]
    unit: Annotated[
        float, In("m"), Field(gt=0, le=1, description="unit of the library's lengths: 1 um where w=10 is 10 um")
    ] = 1.0
    nmos: LibraryDevice
    pmos: LibraryDevice

    def section_of(self, corner: str) -> str:
        """Return the section of a corner; raises InputError for a corner that the library does not have."""
        if corner not in self.sections:
            raise InputError(
                f'corner "{corner}" has no section of the library; allowed are {listing(self.sections)}'
                f"{nearest(corner, self.sections)}"
            )
        return self.sections[corner]

    def includes(self, corner: str, path: Path | None = None) -> list[str]:
        """Return the lines of a deck that read the library at a corner, the sections of every deck first."""
        where = self.path if path is None else path
        sections = [*self.init_sections, self.section_of(corner)]
        return [f'.lib "{where}" {section}' if section else f'.include "{where}"' for section in sections]

    def beside(self, directory: Path) -> Library:
        """Return the same library with its path as seen from the directory of the process file."""
        return self.model_copy(update={"path": directory / self.path})

    def device(self, channel: str) -> LibraryDevice:
        """Return the transistor of a channel, ``n`` or ``p``."""
        return self.nmos if channel == "n" else self.pmos

    def record(self) -> dict[str, Any]:
        """Return what a process file says of the library, without what is as by default."""
        data = self.model_dump(mode="json", exclude_defaults=True)
        return {key: value for key, value in data.items() if value not in ({}, [])}
