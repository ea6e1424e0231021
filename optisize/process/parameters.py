"""Parameters that every transistor law shares: capacitances, noise, matching and temperature."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

from optisize.quantities import In


class Parameters(BaseModel):
    """A table of a process file: unknown keys are refused, values are frozen."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class MatchedParameters(Parameters):
    """How well two transistors of one kind match."""

    threshold_matching: Annotated[
        float,
        In("V*m", "mV*um"),
        Field(ge=0, description="matching A_VT: sigma of the threshold difference is A_VT / sqrt(W L)"),
    ]
    factor_matching: Annotated[
        float,
        In("m", "%*um"),
        Field(ge=0, description="matching A_beta: relative sigma of the current factors' difference times sqrt(W L)"),
    ]


class TransistorParameters(MatchedParameters):
    """What a process says of one kind of transistor, whatever its law; signs are those of an n-channel device."""

    threshold: Annotated[
        float, In("V"), Field(ge=-2, le=5, description="threshold voltage at zero source-bulk voltage")
    ]
    current_factor: Annotated[
        float, In("A/V^2", "uA/V^2"), Field(gt=0, description="low-field mobility times oxide capacitance")
    ]
    body_effect: Annotated[float, In("V^0.5", "V^0.5"), Field(ge=0, description="body-effect coefficient gamma")]
    surface_potential: Annotated[
        float, In("V"), Field(gt=0.1, le=2, description="surface potential phi in strong inversion")
    ]
    threshold_drift: Annotated[
        float, In("V/K", "mV/K"), Field(description="fall of the threshold with temperature")
    ] = 0.0
    mobility_exponent: Annotated[
        float, In(""), Field(description="exponent of the current factor over absolute temperature")
    ] = -1.5
    oxide_capacitance: Annotated[
        float, In("F/m^2", "fF/um^2"), Field(gt=0, description="gate oxide capacitance per area")
    ]
    overlap_capacitance: Annotated[
        float, In("F/m", "fF/um"), Field(ge=0, description="gate overlap of source and of drain per width")
    ]
    junction_capacitance: Annotated[
        float, In("F/m^2", "fF/um^2"), Field(ge=0, description="junction capacitance per area at zero bias")
    ]
    sidewall_capacitance: Annotated[
        float, In("F/m", "fF/um"), Field(ge=0, description="junction capacitance per perimeter at zero bias")
    ]
    junction_potential: Annotated[float, In("V"), Field(gt=0, description="built-in potential of the junctions")] = 0.8
    junction_grading: Annotated[
        float, In(""), Field(gt=0, lt=1, description="grading exponent of the junction area")
    ] = 0.5
    sidewall_grading: Annotated[
        float, In(""), Field(gt=0, lt=1, description="grading exponent of the junction sidewall")
    ] = 0.33
    flicker_coefficient: Annotated[
        float,
        In("V^2*F", "V^2*F"),
        Field(ge=0, description="flicker noise Kf: gate noise density is Kf / (Cox W L f^Af)"),
    ] = 0.0
    flicker_exponent: Annotated[
        float, In(""), Field(gt=0, description="exponent Af of the frequency in flicker noise")
    ] = 1.0
