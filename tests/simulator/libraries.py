"""Small SPICE model libraries: level-1 transistors inside subcircuits, whose every figure the square law says."""

from __future__ import annotations

from pathlib import Path

TEXT = """\
* an invented library
.lib start
.param shift=0
.include "more.lib"
.endl start

.lib tt
.param vtn=0.6 vtp=-0.7
.lib 'parts.lib' both
.endl

.lib ss
.param vtn=0.7 vtp=-0.8
.lib 'parts.lib' both
.endl

.lib broken
.param vtn=0.7 vtp=-0.8
.subckt nch d g s b w=1u
.endl
"""
PARTS = """\
.lib both
.subckt nch d g s b w=10u l=1u ad=0 as=0 pd=0 ps=0 nf=1 m=1
m0 d g s b inside_n w=w l=l ad=ad as=as pd=pd ps=ps m=m
.ends
.subckt pch g s d b w=10u l=1u m=1
mcore d g s b inside_p w=w l=l m=m
.ends
* the limits of the models, as binned libraries state them
.model inside_n nmos level=1 vto={vtn+shift} kp=150u gamma=0.5 phi=0.8 lambda=0.05 tox=7.5n cgso=0.3n cgdo=0.3n
+ cj=0.9m cjsw=0.25n mj=0.5 mjsw=0.33 pb=0.8 is=1e-60 kf=0 $ a comment
.model inside_p pmos level=1 vto=vtp kp=50u gamma=0.45 phi=0.8 lambda=0.06 tox=7.5n
.model bare_n nmos level=1 vto=0.5 kp=100u
.endl both
"""
SIZES = ("--lengths", "1 um, 4 um", "--widths", "2 um, 10 um")


def write_library(directory: Path) -> Path:
    """Write the library into a directory and return its path."""
    (directory / "parts.lib").write_text(PARTS, encoding="ascii")
    (directory / "more.lib").write_text("* nothing\n.param other = 1\n", encoding="ascii")
    path = directory / "all.lib"
    path.write_text(TEXT, encoding="ascii")
    return path
