"""Random members of a set: stable real-rational blocks of norm at most 1 in the interconnection.

A random block is a Blaschke product (all-pass, norm exactly 1 at every frequency) times a band-pass
or first-order low-pass section (norm exactly 1, attained at one frequency), between two random
orthonormal matrices, times a gain in (0, 1]. Real factors are uniform in [-1, 1].
"""

from dataclasses import dataclass

import numpy as np

from identkit.plant_set.fields import (
    Block,
    ComplexArray,
    FloatArray,
    Matrices,
    PlantSetFields,
    TimeBase,
)
from identkit.plant_set.response import TWO_PI, member_response

_GAIN_ONE_SHARE = 0.5
_ON_AXIS = 1e-6


@dataclass(frozen=True, eq=False)
class Member:
    """One plant of the set and the unknowns that make it.

    Attributes
    ----------
    contents
        The set it belongs to.
    delta
        One system per block.
    """

    contents: PlantSetFields
    delta: tuple[Matrices, ...]

    def frequency_response(self, frequency: FloatArray) -> ComplexArray:
        """Return the (outputs, inputs, points) response at `frequency` (Hz), delay included."""
        return member_response(self.contents, frequency, self.delta)

    def state_space(self) -> Matrices:
        """Return A, B, C, D of the member; the nominal's delay stands outside."""
        return close_upper(self.contents.interconnection, stack_diagonal(self.delta))


def draw_members(contents: PlantSetFields, n: int, seed: int = 0) -> list[Member]:
    """Draw `n` members; every block is drawn afresh, one real factor moves all its repetitions."""
    generator = np.random.default_rng(seed)
    drawn = [Member(contents, _draw_delta(contents, generator)) for _ in range(n)]
    return [_made_member(each) for each in drawn]


def _made_member(drawn: Member) -> Member:
    """Halve Delta until the plant has as many unstable poles as the nominal.

    In the inverse form a stable Delta can move poles across the axis where |W| > 1; Delta = 0 never
    does.
    """
    contents = drawn.contents
    if contents.form != "inverse-multiplicative":
        return drawn
    expected = _unstable(contents.nominal.A, contents.time)
    while _unstable(drawn.state_space().A, contents.time) != expected:
        halved = [Matrices(d.A, d.B, 0.5 * d.C, 0.5 * d.D) for d in drawn.delta]
        drawn = Member(contents, tuple(halved))
    return drawn


def _unstable(drift: FloatArray, time: TimeBase) -> int:
    poles = np.linalg.eigvals(drift)
    if time.domain == "sampled":
        return int(np.sum(np.abs(poles) > 1.0 + _ON_AXIS))
    return int(np.sum(poles.real > _ON_AXIS * np.abs(poles) + _ON_AXIS))


def _draw_delta(contents: PlantSetFields, generator: np.random.Generator) -> tuple[Matrices, ...]:
    factors: dict[str, float] = {}
    blocks = []
    for block in contents.interconnection.blocks:
        if block.kind == "real-repeated":
            name = block.parameter or ""
            value = factors.setdefault(name, float(generator.uniform(-1.0, 1.0)))
            blocks.append(static(value * np.eye(block.rows)))
        else:
            blocks.append(draw_block(block, contents.band, contents.time, generator))
    return tuple(blocks)


def static(gain: FloatArray) -> Matrices:
    """Return a constant matrix as a system without states."""
    rows, columns = gain.shape
    return Matrices(np.zeros((0, 0)), np.zeros((0, columns)), np.zeros((rows, 0)), gain)


def draw_block(
    block: Block, band: tuple[float, float], time: TimeBase, generator: np.random.Generator
) -> Matrices:
    """Draw one stable system of norm at most 1 with its dynamics inside the band (Hz)."""
    rank = min(block.rows, block.columns)
    core = stack_diagonal([_draw_scalar(band, time, generator) for _ in range(rank)])
    left = _orthonormal(block.rows, rank, generator)
    right = _orthonormal(block.columns, rank, generator).T
    gain = 1.0 if generator.random() < _GAIN_ONE_SHARE else float(generator.random())
    return Matrices(core.A, core.B @ right, gain * left @ core.C, gain * left @ core.D @ right)


def _orthonormal(size: int, rank: int, generator: np.random.Generator) -> FloatArray:
    factor, upper = np.linalg.qr(generator.standard_normal((size, rank)))
    return np.asarray(factor * np.where(np.diag(upper) < 0.0, -1.0, 1.0))


def _draw_scalar(
    band: tuple[float, float], time: TimeBase, generator: np.random.Generator
) -> Matrices:
    system = _draw_shape(band, generator)
    for _ in range(int(generator.integers(0, 3))):
        system = series(_all_pass(_frequency(band, generator), _damping(generator)), system)
    return sampled(system, time.period) if time.domain == "sampled" else system


def _draw_shape(band: tuple[float, float], generator: np.random.Generator) -> Matrices:
    """Draw the magnitude: flat, low-pass or band-pass."""
    kind = int(generator.integers(0, 3))
    natural = _frequency(band, generator)
    if kind == 0:
        return static(np.array([[1.0 if generator.random() < 0.5 else -1.0]]))
    if kind == 1:
        return Matrices(
            np.array([[-natural]]), np.array([[natural]]), np.array([[1.0]]), np.zeros((1, 1))
        )
    return _second_order(natural, _damping(generator), 1.0, 0.0)


def _all_pass(natural: float, damping: float) -> Matrices:
    """Return (s^2 - 2 zeta w s + w^2) / (s^2 + 2 zeta w s + w^2): magnitude 1 everywhere."""
    return _second_order(natural, damping, -2.0, 1.0)


def _second_order(natural: float, damping: float, gain: float, feed: float) -> Matrices:
    """Return gain * 2 zeta w s / (s^2 + 2 zeta w s + w^2) + feed, states of equal size."""
    loss = 2.0 * damping * natural
    drift = np.array([[0.0, natural], [-natural, -loss]])
    return Matrices(drift, np.array([[0.0], [loss]]), np.array([[0.0, gain]]), np.array([[feed]]))


def _frequency(band: tuple[float, float], generator: np.random.Generator) -> float:
    low = max(band[0], 1e-3 * band[1])
    return float(TWO_PI * np.exp(generator.uniform(np.log(low), np.log(band[1]))))


def _damping(generator: np.random.Generator) -> float:
    return float(10.0 ** generator.uniform(-2.0, 0.0))


def series(second: Matrices, first: Matrices) -> Matrices:
    """Return second after first."""
    n, m = second.states, first.states
    drift = np.zeros((n + m, n + m))
    drift[:n, :n], drift[:n, n:], drift[n:, n:] = second.A, second.B @ first.C, first.A
    return Matrices(
        drift,
        np.vstack([second.B @ first.D, first.B]),
        np.hstack([second.C, second.D @ first.C]),
        second.D @ first.D,
    )


def stack_diagonal(systems: "list[Matrices] | tuple[Matrices, ...]") -> Matrices:
    """Put systems side by side, each with its own inputs and outputs."""
    return Matrices(*(_diagonal([getattr(s, name) for s in systems]) for name in "ABCD"))


def _diagonal(parts: list[FloatArray]) -> FloatArray:
    whole = np.zeros((sum(p.shape[0] for p in parts), sum(p.shape[1] for p in parts)))
    row = column = 0
    for part in parts:
        whole[row : row + part.shape[0], column : column + part.shape[1]] = part
        row, column = row + part.shape[0], column + part.shape[1]
    return whole


def sampled(system: Matrices, period: float) -> Matrices:
    """Map to z by the bilinear rule, which keeps the norm.

    Source: K. Glover, Int. J. Control 39(6), 1984, section on discrete-time systems.
    """
    half = 0.5 * period * system.A
    inverse = np.linalg.inv(np.eye(system.states) - half)
    root = np.sqrt(period)
    return Matrices(
        inverse @ (np.eye(system.states) + half),
        root * inverse @ system.B,
        root * system.C @ inverse,
        system.D + 0.5 * period * system.C @ inverse @ system.B,
    )


def close_upper(around: Matrices, delta: Matrices) -> Matrices:
    """Return the upper LFT of two systems in state space (positive feedback).

    Source: K. Zhou, J. C. Doyle and K. Glover, *Robust and Optimal Control*, 1996, section 10.4.
    """
    rows, columns = delta.D.shape
    b1, b2 = around.B[:, :rows], around.B[:, rows:]
    c1, c2 = around.C[:columns], around.C[columns:]
    d11, d12 = around.D[:columns, :rows], around.D[:columns, rows:]
    d21, d22 = around.D[columns:, :rows], around.D[columns:, rows:]
    # z = c1 x + d11 w + d12 u and w = Cd xd + Dd z give z in terms of the states and u.
    loop = np.linalg.inv(np.eye(columns) - d11 @ delta.D)
    z_x, z_d, z_u = loop @ c1, loop @ d11 @ delta.C, loop @ d12
    w_x, w_d, w_u = delta.D @ z_x, delta.C + delta.D @ z_d, delta.D @ z_u
    return Matrices(
        np.block([[around.A + b1 @ w_x, b1 @ w_d], [delta.B @ z_x, delta.A + delta.B @ z_d]]),
        np.vstack([b2 + b1 @ w_u, delta.B @ z_u]),
        np.hstack([c2 + d21 @ w_x, d21 @ w_d]),
        d22 + d21 @ w_u,
    )
