"""Invented plants and noisy responses with known truth, and the Cramer-Rao bound of a plant."""

from dataclasses import dataclass

import numpy as np

from identkit.methods.modal_model import (
    ModalParameters,
    modal_derivatives,
    modal_response,
    parameter_names,
)


@dataclass(frozen=True)
class Kind:
    """What sort of plant and measurement to draw."""

    modes: int = 8
    base: str = "pivot"
    band: tuple[float, float] = (50.0, 22000.0)
    points: int = 1200
    noise: float = 0.03
    floor: float = 0.0
    general: bool = False
    delay: bool = True
    close: bool = False
    even: bool = False
    weakest: float = 0.02
    damping: tuple[float, float] = (0.005, 0.03)


@dataclass(frozen=True)
class Drawn:
    """One response, its variance and its truth."""

    frequency: np.ndarray
    response: np.ndarray
    variance: np.ndarray
    truth: ModalParameters


def draw(rng, kind=None, **changes):
    """Draw a plant and measure it."""
    kind = kind or Kind(**changes)
    grid = np.linspace if kind.even else np.geomspace
    frequency = grid(*kind.band, kind.points)
    truth = plant(rng, kind)
    clean = modal_response(frequency, truth)
    variance = (kind.noise * np.abs(clean)) ** 2
    variance += (kind.floor * np.median(np.abs(clean))) ** 2
    error = rng.standard_normal((2, kind.points)) * np.sqrt(variance / 2.0)
    return Drawn(frequency, clean + error[0] + 1j * error[1], variance, truth)


def plant(rng, kind):
    """Draw a plant: log-uniform modes at least 1.8 % apart, signs at random."""
    low, high = kind.band
    gain = (2.0 * np.pi * 1.2 * low) ** 2 * 50.0
    modal = modal_frequencies(rng, kind)
    damping = np.exp(rng.uniform(*np.log(kind.damping), kind.modes))
    residue = gain * np.exp(rng.uniform(np.log(kind.weakest), 0.0, kind.modes))
    residue = residue * rng.choice([-1.0, 1.0], kind.modes)
    share = rng.uniform(-0.4, 0.4, kind.modes) if kind.general else np.zeros(kind.modes)
    return ModalParameters(
        modal, damping, residue, residue * share / (2.0 * np.pi * modal), kind.base,
        base_gain=gain if kind.base == "free" else 0.0,
        base_frequency=1.2 * low if kind.base == "pivot" else 0.0,
        base_damping_ratio=0.35 if kind.base == "pivot" else 0.0,
        base_residue=gain if kind.base == "pivot" else 0.0,
        feedthrough=0.5 * gain / (2.0 * np.pi * 1.3 * high) ** 2,
        delay=rng.uniform(0.2, 5.0) / (2.0 * np.pi * high) if kind.delay else 0.0,
    )  # fmt: skip


def modal_frequencies(rng, kind):
    """Draw modal frequencies; with `close` in pairs 2 to 5 % apart."""
    low, high = kind.band
    limits = (1.1 * low, 0.95 * high) if kind.base == "none" else (high / 25.0, 0.9 * high)
    while True:
        modal = np.exp(rng.uniform(*np.log(limits), kind.modes))
        modal = np.sort(modal)
        if kind.close:
            pairs = modal[1::2].size
            modal[1::2] = modal[::2][:pairs] * rng.uniform(1.02, 1.05, pairs)
            modal = np.sort(modal)
        if np.all(np.diff(np.log(modal)) > 0.018):
            return modal


def cramer_rao(drawn, *, general=False, delay=True, feedthrough=True):
    """Return the bound on the covariance (p, p) in natural units, from an orthogonal factor."""
    slope = modal_derivatives(drawn.frequency, drawn.truth, general=general)
    slope = slope * np.sqrt(2.0 / drawn.variance)[:, None]
    slope = np.concatenate([slope.real, slope.imag])
    kept = np.ones(slope.shape[1], dtype=bool)
    kept[:2] = delay, feedthrough
    scale = np.linalg.norm(slope[:, kept], axis=0)
    inverse = np.linalg.inv(np.linalg.qr(slope[:, kept] / scale, mode="r")) / scale[:, None]
    bound = np.zeros((kept.size, kept.size))
    bound[np.ix_(kept, kept)] = inverse @ inverse.T
    return bound


def true_significance(drawn, bound, *, general=False):
    """Return (modes,) residue over its Cramer-Rao standard error (residue and rate together)."""
    names = parameter_names(drawn.truth.base, drawn.truth.modal_frequency.size, general=general)
    out = []
    for k in range(drawn.truth.modal_frequency.size):
        first = names.index(f"residue_{k + 1}")
        part = slice(first, first + (2 if general else 1))
        value = np.array([drawn.truth.residue[k], drawn.truth.residue_rate[k]])
        value = value[: part.stop - part.start]
        out.append(np.sqrt(value @ np.linalg.solve(bound[part, part], value)))
    return np.array(out)


@dataclass
class Tally:
    """Modes to be found and found; errors over the bound and over the stated standard errors."""

    wanted: int = 0
    found: int = 0
    extra: int = 0
    over_bound: list = None
    over_stated: list = None

    def count(self, drawn, fit, *, general=False, delay=True, least=7.0):
        """Add one fit."""
        self.over_bound, self.over_stated = self.over_bound or [], self.over_stated or []
        bound = cramer_rao(drawn, general=general, delay=delay)
        names = parameter_names(drawn.truth.base, drawn.truth.modal_frequency.size, general=general)
        found, free = fit.parameters, set(range(fit.parameters.modal_frequency.size))
        self.extra += max(0, len(free) - drawn.truth.modal_frequency.size)
        for k in np.flatnonzero(true_significance(drawn, bound, general=general) > least):
            self.wanted += 1
            first = names.index(f"modal_frequency_{k + 1}")
            error = np.sqrt(np.diag(bound)[first : first + 3])
            near = [
                j
                for j in free
                if abs(found.modal_frequency[j] - drawn.truth.modal_frequency[k]) < 6 * error[0]
            ]
            if not near:
                continue
            at = drawn.truth.modal_frequency[k]
            j = min(near, key=lambda j: abs(found.modal_frequency[j] - at))
            free.discard(j)
            self.found += 1
            off = np.array([
                found.modal_frequency[j] - at,
                found.damping_ratio[j] - drawn.truth.damping_ratio[k],
                found.residue[j] - drawn.truth.residue[k],
            ])  # fmt: skip
            place = fit.parameter_names.index(f"modal_frequency_{j + 1}")
            stated = np.sqrt(np.diag(fit.covariance)[place : place + 3])
            self.over_bound.append(off / error)
            self.over_stated.append(off / stated)
