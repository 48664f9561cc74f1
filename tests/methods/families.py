"""Small families of invented modal plants for the tests of sets."""

import numpy as np

from identkit.methods.modal_model import ModalParameters

FREQUENCY = np.array([1200.0, 2500.0, 4100.0, 5200.0, 7000.0, 9000.0, 12000.0, 18000.0])
DAMPING = np.array([0.01, 0.02, 0.015, 0.01, 0.02, 0.01, 0.015, 0.02])
RESIDUE = 1e7 * np.array([1.0, -2.0, 3.0, -1.0, 2.0, 4.0, -3.0, 5.0])


def plant(
    rng: np.random.Generator | None = None, base: str = "pivot", spread: float = 1.0, modes: int = 8
) -> ModalParameters:
    """Return the family's centre, or a member drawn at random."""
    draw = (lambda size: np.zeros(size)) if rng is None else (lambda size: rng.normal(size=size))
    common = draw(5) * spread
    return ModalParameters(
        modal_frequency=FREQUENCY[:modes] * np.exp(0.01 * spread * draw(modes)),
        damping_ratio=DAMPING[:modes] * np.exp(0.2 * spread * draw(modes)),
        residue=RESIDUE[:modes] * (1.0 + 0.1 * spread * draw(modes)),
        residue_rate=np.zeros(modes),
        base=base,
        base_gain=1e8 * (1.0 + 0.05 * common[0]) if base == "free" else 0.0,
        base_frequency=60.0 * np.exp(0.1 * common[1]) if base == "pivot" else 0.0,
        base_damping_ratio=0.4 if base == "pivot" else 0.0,
        base_residue=1e8 * (1.0 + 0.05 * common[2]) if base == "pivot" else 0.0,
        feedthrough=1e-3,
        delay=2e-5 * (1.0 + 0.1 * common[3]),
    )


def family(count: int, seed: int, **options: object) -> list[ModalParameters]:
    """Return `count` members drawn at random."""
    rng = np.random.default_rng(seed)
    return [plant(rng, **options) for _ in range(count)]  # type: ignore[arg-type]
