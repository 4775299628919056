"""The kinds of models, one file a kind."""

from realize.models.base import CONTINUOUS, DeadTime, Model, Offset, Ports, Signal, TimeBase
from realize.models.digest import digest, mark
from realize.models.frequency_response import FrequencyResponse
from realize.models.impulse_response import ImpulseResponse, is_data
from realize.models.matrix_fraction import MatrixFraction
from realize.models.pole_residue import PoleResidue
from realize.models.second_order import SecondOrder
from realize.models.sections import Sections
from realize.models.state_space import StateSpace
from realize.models.time_record import TimeRecord
from realize.models.transfer_function import TransferFunction
from realize.models.zero_pole_gain import ZeroPoleGain

MODEL_TYPES: dict[str, type[Model]] = {
    model.kind: model
    for model in (
        TransferFunction,
        ZeroPoleGain,
        PoleResidue,
        Sections,
        MatrixFraction,
        StateSpace,
        SecondOrder,
        FrequencyResponse,
        ImpulseResponse,
        TimeRecord,
    )
}

__all__ = [
    "CONTINUOUS",
    "MODEL_TYPES",
    "DeadTime",
    "FrequencyResponse",
    "ImpulseResponse",
    "MatrixFraction",
    "Model",
    "Offset",
    "PoleResidue",
    "Ports",
    "SecondOrder",
    "Sections",
    "Signal",
    "StateSpace",
    "TimeBase",
    "TimeRecord",
    "TransferFunction",
    "ZeroPoleGain",
    "digest",
    "is_data",
    "mark",
]
