"""The fields of a plant set as they stand in the file, one frozen dataclass per object."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

FORMAT = "identkit-plant-set/1"
LISTED_AT_MOST = 200


@dataclass(frozen=True)
class TimeBase:
    """Continuous time, or sampled with `period` seconds."""

    domain: str = "continuous"
    period: float = 0.0


@dataclass(frozen=True)
class Channel:
    """One input or output of the plant and its physical unit."""

    name: str
    unit: str


@dataclass(frozen=True, eq=False)
class Matrices:
    """State space C (sI - A)^-1 B + D (z in place of s where sampled); states in rad/s.

    Attributes
    ----------
    A, B, C, D
        (states, states), (states, inputs), (outputs, states), (outputs, inputs).
    """

    A: FloatArray
    B: FloatArray
    C: FloatArray
    D: FloatArray

    @property
    def states(self) -> int:
        """Number of states."""
        return int(self.A.shape[0])


@dataclass(frozen=True, eq=False)
class Nominal(Matrices):
    """The nominal plant; `delay` (s) multiplies its output by e^{-s delay}."""

    delay: float = 0.0


@dataclass(frozen=True, eq=False)
class Weights:
    """Stable, minimum-phase weights on the two sides of the block; None where the form has none."""

    left: Matrices | None = None
    right: Matrices | None = None


@dataclass(frozen=True)
class RealFactor:
    """A real factor: physical value = centre + half_range * delta."""

    name: str
    meaning: str
    centre: float
    half_range: float
    unit: str


@dataclass(frozen=True)
class Block:
    """One block of Delta: "complex-full", or "real-repeated" with its real factor's name."""

    kind: str
    rows: int
    columns: int
    parameter: str | None = None


@dataclass(frozen=True, eq=False)
class Interconnection(Matrices):
    """What stands around Delta; channels of the blocks come before those of the plant."""

    blocks: tuple[Block, ...] = ()


@dataclass(frozen=True, eq=False)
class Covariance:
    """(parameters, parameters) covariance of one fit in the natural units of the file."""

    parameters: tuple[str, ...]
    matrix: FloatArray


@dataclass(frozen=True, eq=False)
class FittedPlant:
    """One measured plant as its fit describes it.

    Attributes
    ----------
    response, labels
        Text id of the measured response, and its labels; a missing label is absent.
    modal_frequency, damping_ratio
        (modes,) Hz and 1.
    residue, residue_rate
        (modes, outputs, inputs) output/input (rad/s)^2 and output/input (rad/s).
    base
        "free", "pivot" or "none".
    base_gain, base_residue
        (outputs, inputs) output/input (rad/s)^2; zeros where the base has none.
    base_frequency, base_damping_ratio
        Hz and 1; zeros where the base has none.
    feedthrough
        (outputs, inputs) output/input.
    delay
        s.
    delta
        (factors,) real factors of this plant.
    reach, reach_frequency
        Smallest scaling of the set that holds the plant, and where (Hz) it is attained.
    """

    response: str
    modal_frequency: FloatArray
    damping_ratio: FloatArray
    residue: FloatArray
    residue_rate: FloatArray
    base: str
    base_gain: FloatArray
    base_frequency: float
    base_damping_ratio: float
    base_residue: FloatArray
    feedthrough: FloatArray
    delay: float
    labels: Mapping[str, str | float] = field(default_factory=dict)
    covariance: Covariance | None = None
    delta: FloatArray = field(default_factory=lambda: np.zeros(0))
    reach: float = 0.0
    reach_frequency: float = 0.0


@dataclass(frozen=True, eq=False)
class Extension:
    """How the weight goes on outside its points, beside what is asked at the nearest end.

    It stays below `factor` times what is allowed and above what is asked over its cube.

    Attributes
    ----------
    factor
        At least 1.
    frequency
        (points,) Hz, where it was kept there.
    at_infinity
        Whether it was kept at infinite frequency too.
    """

    factor: float
    frequency: FloatArray
    at_infinity: bool


@dataclass(frozen=True, eq=False)
class FurtherCeiling:
    """Absolute limits `value` of the weight at `frequency` (Hz) where no radius is given."""

    frequency: FloatArray
    value: FloatArray


@dataclass(frozen=True, eq=False)
class Radii:
    """Required radius and weight at every frequency (points,) where the weight was bounded.

    Attributes
    ----------
    frequency
        Hz, increasing.
    required_radius, weight_magnitude
        Largest error of the plants held, and the weight.
    set_by
        Response that sets the radius at each point; empty text where the floor does.
    allowed_excess
        Shape of allowed excess at each point.
    floor
        Smallest radius ever bounded.
    ceiling
        Absolute limit of the weight, or None.
    extension, further_ceiling
        What else the weight was asked to keep, or None.
    """

    frequency: FloatArray
    required_radius: FloatArray
    weight_magnitude: FloatArray
    set_by: tuple[str, ...]
    allowed_excess: FloatArray
    floor: float
    ceiling: FloatArray | None = None
    extension: Extension | None = None
    further_ceiling: FurtherCeiling | None = None


@dataclass(frozen=True)
class Excluded:
    """A response left out of the bound, and why."""

    label: str
    reason: str


@dataclass(frozen=True)
class Measured:
    """How many of the responses that count are held; `setting` of them set the radius somewhere.

    The excluded are not among `of`.
    """

    held: int
    of: int
    setting: int
    excluded: tuple[Excluded, ...] = ()


@dataclass(frozen=True)
class BetweenGrid:
    """How the plants were checked between grid points, and the largest reach found there."""

    method: str
    worst: float
    tolerance: float


@dataclass(frozen=True)
class Optimality:
    """Excess of the weight, what no weight of this order can beat, and the gap; dB."""

    excess_db: float
    floor_db: float
    gap_db: float
    order: int


@dataclass(frozen=True)
class Coverage:
    """The share `content` of future units held with `confidence`, and on what it rests."""

    content: float
    confidence: float
    units: int
    method: str
    assumptions: tuple[str, ...]


@dataclass(frozen=True)
class Envelope:
    """The labels that were measured; outside them nothing is claimed."""

    labels: Mapping[str, tuple[str | float, ...]] = field(default_factory=dict)
    temperature: tuple[float, float] | None = None
    position: tuple[float, float] | None = None


@dataclass(frozen=True)
class AuditVerdict:
    """Whether the audit passed, which checks failed, and whether the file was forced."""

    passed: bool
    failed: tuple[str, ...] = ()
    forced: bool = False


@dataclass(frozen=True)
class Certificate:
    """What the set claims; `coverage` and `audit` are None until they are stated."""

    measured: Measured
    between_grid: BetweenGrid
    optimality: Optimality
    envelope: Envelope
    coverage: Coverage | None = None
    audit: AuditVerdict | None = None


@dataclass(frozen=True)
class Attribution:
    """Who attains the bound, where (Hz), and the nearest mode."""

    label: str
    frequency: float
    reach: float
    mode: str


@dataclass(frozen=True)
class Provenance:
    """Where the set came from: digests of its inputs, versions, settings and time (ISO 8601)."""

    input_digests: Mapping[str, str] = field(default_factory=dict)
    versions: Mapping[str, str] = field(default_factory=dict)
    settings: Mapping[str, Any] = field(default_factory=dict)
    time: str = ""


@dataclass(frozen=True, eq=False)
class PlantSetFields:
    """Everything a plant set file holds, field by field."""

    form: str
    time: TimeBase
    inputs: tuple[Channel, ...]
    outputs: tuple[Channel, ...]
    band: tuple[float, float]
    nominal: Nominal
    weights: Weights
    parameters: tuple[RealFactor, ...]
    interconnection: Interconnection
    plants: tuple[FittedPlant, ...]
    radii: Radii
    certificate: Certificate
    attribution: tuple[Attribution, ...]
    provenance: Provenance

    @property
    def is_scalar(self) -> bool:
        """Whether the plant has one input and one output."""
        return len(self.inputs) == 1 and len(self.outputs) == 1
