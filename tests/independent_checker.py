"""A set file re-checked from nothing but its text: json, numpy and scipy, no line of identkit.

The checker below works from what reach is and what the fields mean, no more. It
recomputes reach of the listed plants over the band, the radii, the excess and the optimality gap,
and has to refuse copies that were tampered with.
"""

import numpy as np
from scipy.optimize import linprog, minimize_scalar

ROUNDING = 1e-6
FORMS = ("multiplicative", "additive", "input-multiplicative", "inverse-multiplicative")
LISTED_AT_MOST = 200


def rational(system, s):
    """C (sI - A)^-1 B + D of a scalar system by eigenvectors, checked by solving at a few s."""
    a, b, c, d = (np.asarray(system[name], dtype=float) for name in "ABCD")
    states = len(a)
    if states == 0:
        return np.full(np.shape(s), d[0, 0], dtype=complex)
    values, vectors = np.linalg.eig(a)
    residues = (c @ vectors)[0] * np.linalg.solve(vectors, b)[:, 0]
    response = d[0, 0] + (residues / (np.ravel(s)[:, None] - values)).sum(axis=1)
    for k in np.linspace(0, response.size - 1, 5).astype(int):
        slow = d[0, 0] + c @ np.linalg.solve(np.ravel(s)[k] * np.eye(states) - a, b)
        assert abs(slow[0, 0] - response[k]) < 1e-8 * abs(slow[0, 0])
    return response.reshape(np.shape(s))


def modal(plant, s):
    """Response of a listed plant from its modal parameters and delay."""
    modes = plant["modal_parameters"]
    total = np.full(np.shape(s), modes["feedthrough"][0][0], dtype=complex)
    terms = list(
        zip(
            modes["modal_frequency"],
            modes["damping_ratio"],
            np.ravel(modes["residue"]),
            np.ravel(modes["residue_rate"]),
            strict=True,
        )
    )
    if modes["base"] == "pivot":
        pivot = (modes["base_frequency"], modes["base_damping_ratio"])
        terms.append((*pivot, modes["base_residue"][0][0], 0.0))
    if modes["base"] == "free":
        total += modes["base_gain"][0][0] / s**2
    for hertz, ratio, residue, rate in terms:
        natural = 2 * np.pi * hertz
        total += (residue + s * rate) / (natural**2 + 2 * ratio * natural * s + s**2)
    return total * np.exp(-s * plant["delay"])


class Checker:
    """Everything the file claims, worked out again."""

    def __init__(self, document):
        self.file = document
        self.radii = {
            name: np.asarray(self.file["radii"][name], dtype=float)
            for name in ("frequency", "required_radius", "weight_magnitude", "allowed_excess")
        }
        self.failures = []

    def nominal(self, s):
        return rational(self.file["nominal"], s) * np.exp(-s * self.file["nominal"]["delay"])

    def weight(self, s):
        weights = self.file["weights"]
        return rational(weights["left"], s) * rational(weights["right"], s)

    def error(self, plant, s):
        """What the weight has to cover, worked out from what each form says a plant is."""
        nominal, own = self.nominal(s), modal(plant, s)
        if self.file["form"] == "additive":  # P = P0 + W Delta
            return np.abs(own - nominal)
        if self.file["form"] == "inverse-multiplicative":  # P = P0 / (1 + W Delta)
            return np.abs(nominal / own - 1.0)
        return np.abs(own / nominal - 1.0)  # P = (1 + W Delta) P0, or P0 (1 + W Delta)

    def floor(self):
        """Smallest radius: absolute for relative errors, a share of |P0| for absolute ones."""
        floor = self.file["radii"]["floor"]
        if self.file["form"] == "additive":
            return floor * np.abs(self.nominal(2j * np.pi * self.radii["frequency"]))
        return np.full(self.radii["frequency"].size, floor)

    def expect(self, holds, claim):
        if not holds:
            self.failures.append(claim)

    def run(self):
        assert self.file["format"] == "identkit-plant-set/1"
        assert self.file["form"] in FORMS
        assert self.file["time"]["domain"] == "continuous"
        self.check_weight()
        self.check_radii()
        self.check_reach()
        self.check_turns()
        self.check_interconnection()
        self.check_optimality()
        return self.failures

    def check_weight(self):
        left = self.file["weights"]["left"]
        a, b, c, d = (np.asarray(left[name], dtype=float) for name in "ABCD")
        self.expect(np.linalg.eigvals(a).real.max() < 0, "weight: stable")
        zeros = np.linalg.eigvals(a - b @ c / d[0, 0])
        self.expect(zeros.real.max() < 0, "weight: minimum phase")
        own = np.abs(self.weight(2j * np.pi * self.radii["frequency"]))
        stated = self.radii["weight_magnitude"]
        self.expect(np.abs(stated / own - 1).max() < ROUNDING, "weight: magnitude as listed")
        covers = own >= self.radii["required_radius"] * (1 - ROUNDING)
        self.expect(covers.all(), "weight: covers every radius")

    def check_radii(self):
        """Every radius above the floor is attained by the plant named, and exceeded by none."""
        plants = {plant["response"]: plant for plant in self.file["plants"]}
        excluded = {item["label"] for item in self.file["certificate"]["measured"]["excluded"]}
        s = 2j * np.pi * self.radii["frequency"]
        radius, floor = self.radii["required_radius"], self.floor()
        setters = np.array(self.file["radii"]["set_by"])
        for name, plant in plants.items():
            error = self.error(plant, s)
            below = name in excluded or np.all(error <= radius * (1 + ROUNDING))
            self.expect(below, f"radii: not exceeded by {name}")
            mine = setters == name
            attained = np.abs(error[mine] / radius[mine] - 1) < ROUNDING
            self.expect(attained.all(), f"radii: attained by {name}")
        free = setters == ""
        self.expect(np.allclose(radius[free], floor[free], rtol=1e-7), "radii: floor")
        named = set(setters.tolist()) - {""}
        measured = self.file["certificate"]["measured"]
        self.expect(len(named) == measured["setting"], "counts: plants that set the bound")
        missing = named - set(plants)
        cut = max(measured["setting"] - LISTED_AT_MOST, 0)
        self.expect(len(missing) <= cut, f"radii: set by plants that are not listed {missing}")

    def check_reach(self):
        tolerance = ROUNDING + self.file["certificate"]["between_grid"]["tolerance"]
        excluded = {item["label"] for item in self.file["certificate"]["measured"]["excluded"]}
        for plant in self.file["plants"]:
            value, name = self.reach(plant), plant["response"]
            self.expect(
                abs(value - plant["reach"]["value"]) < tolerance * value, f"reach: of {name}"
            )
            self.expect(value <= 1 + tolerance or name in excluded, f"reach: {name} is held")

    def check_turns(self):
        """P0/P makes no turn around zero: else an inverse set of norm 1 proves nothing."""
        if self.file["form"] != "inverse-multiplicative":
            return
        excluded = {item["label"] for item in self.file["certificate"]["measured"]["excluded"]}
        s = 2j * np.pi * np.geomspace(*self.file["band"], 200_000)
        nominal = self.nominal(s)
        for plant in self.file["plants"]:
            jumps = np.diff(np.angle(nominal / modal(plant, s)))
            turned = np.sum(jumps < -np.pi) != np.sum(jumps > np.pi)
            name = plant["response"]
            self.expect(not turned or name in excluded, f"turns: {name}")

    def reach(self, plant):
        """Largest error over weight: a grid that knows the modes, then Brent at every maximum."""
        low, high = self.file["band"]
        modes = plant["modal_parameters"]
        near = [
            hertz * (1 + ratio * np.linspace(-4, 4, 81))
            for hertz, ratio in zip(modes["modal_frequency"], modes["damping_ratio"], strict=True)
        ]
        poles = np.linalg.eigvals(np.asarray(self.file["nominal"]["A"]))
        near += [(abs(p.imag) + abs(p.real) * np.linspace(-4, 4, 81)) / (2 * np.pi) for p in poles]
        grid = np.unique(np.clip(np.concatenate([np.geomspace(low, high, 4000), *near]), low, high))

        def ratio(hertz):
            s = 2j * np.pi * np.atleast_1d(hertz)
            return self.error(plant, s) / np.abs(self.weight(s))

        values = ratio(grid)
        best = values.max()
        peaks = np.flatnonzero((values[1:-1] >= values[:-2]) & (values[1:-1] >= values[2:])) + 1
        for k in peaks[values[peaks] > 0.8 * best]:
            found = minimize_scalar(
                lambda hertz: -ratio(hertz)[0],
                bounds=(grid[k - 1], grid[k + 1]),
                method="bounded",
                options={"xatol": 1e-7 * grid[k]},
            )
            best = max(best, -found.fun)
        return best

    def check_interconnection(self):
        """Closed around a block of size 0.8 it is exactly the plant that the form makes."""
        around = self.file["interconnection"]
        a, b, c, d = (np.asarray(around[name], dtype=float) for name in "ABCD")
        block = around["blocks"][0]
        self.expect(
            [block["kind"], block["rows"], block["columns"]] == ["complex-full", 1, 1], "blocks"
        )
        for hertz in np.geomspace(*self.file["band"], 25):
            s = 2j * np.pi * hertz
            m = d + c @ np.linalg.solve(s * np.eye(len(a)) - a, b)
            delta = 0.8 * np.exp(1j * hertz)
            member = m[1, 1] + m[1, 0] * delta / (1 - m[0, 0] * delta) * m[0, 1]
            expected = self.member(np.array([s]), delta)[0]
            self.expect(abs(member / expected - 1) < 1e-7, f"interconnection at {hertz:.5g} Hz")

    def member(self, s, delta):
        nominal, error = rational(self.file["nominal"], s), self.weight(s) * delta
        if self.file["form"] == "inverse-multiplicative":
            return nominal / (1 + error)
        return nominal + error if self.file["form"] == "additive" else nominal * (1 + error)

    def conditions(self):
        """All demands on |W|: angular frequency (inf included), least, allowed / t, ceiling."""
        radii, extension = self.file["radii"], self.file["radii"].get("extension")
        omega = 2 * np.pi * self.radii["frequency"]
        lower = self.radii["required_radius"]
        upper = lower * self.radii["allowed_excess"]
        ceiling = np.asarray(radii.get("ceiling", np.full(omega.size, np.inf)), dtype=float)
        if extension:
            outside = 2 * np.pi * np.asarray(extension["frequency"], dtype=float)
            outside = np.append(outside, np.inf) if extension["at_infinity"] else outside
            end = np.where(outside < omega[0], 0, -1)
            factor = extension["factor"]
            omega = np.concatenate([omega, outside])
            lower = np.concatenate([lower, lower[end] / factor**3])
            upper = np.concatenate([upper, upper[end] * factor])
            ceiling = np.concatenate([ceiling, ceiling[end]])
        further = radii.get("further_ceiling")
        if further:
            more = 2 * np.pi * np.asarray(further["frequency"], dtype=float)
            omega = np.concatenate([omega, more])
            lower = np.concatenate([lower, np.zeros(more.size)])
            upper = np.concatenate([upper, np.full(more.size, np.inf)])
            ceiling = np.concatenate([ceiling, np.asarray(further["value"], dtype=float)])
        return omega, lower, upper, ceiling

    def weight_at(self, omega):
        """|W| with infinity allowed."""
        finite = np.isfinite(omega)
        d = self.file["weights"]["left"]["D"][0][0] * self.file["weights"]["right"]["D"][0][0]
        return np.where(finite, np.abs(self.weight(1j * np.where(finite, omega, 1.0))), abs(d))

    def check_optimality(self):
        stated = self.file["certificate"]["optimality"]
        omega, lower, upper, ceiling = self.conditions()
        weight = self.weight_at(omega)
        inside = np.arange(omega.size) < self.radii["frequency"].size
        self.expect(np.all(weight >= lower * (1 - ROUNDING)), "optimality: least weight kept")
        self.expect(np.all(weight <= ceiling * (1 + ROUNDING)), "optimality: ceiling kept")
        excess = 20 * np.log10((weight / upper)[inside].max())
        self.expect(abs(stated["excess_db"] - excess) < 1e-3, "optimality: excess")
        gap = stated["excess_db"] - stated["floor_db"]
        self.expect(abs(stated["gap_db"] - gap) < 1e-6 and gap > -1e-6, "optimality: gap")
        states = len(self.file["weights"]["left"]["A"])
        self.expect(states == stated["order"], "optimality: order")
        slack = self.slack(10 ** ((stated["floor_db"] - 0.01) / 10), stated["order"])
        self.expect(slack < 0, "optimality: floor is a floor")

    def slack(self, level, order):
        """Largest slack with which some N/D of this order keeps every demand at this level.

        lower^2 D <= N <= level upper^2 D, degrees at most `order` in x = (1 - u)/(1 + u),
        u = (omega/centre)^2: linear in the coefficients. Rows are scaled by the file's own N and D,
        so that a slack is relative; it is negative exactly where no weight of the order exists.
        """
        omega, lower, upper, ceiling = self.conditions()
        weight = self.weight_at(omega)
        finite = np.isfinite(omega)
        centre = np.sqrt(omega[finite & (omega > 0)].min() * omega[finite].max())
        u = np.where(finite, omega, 0.0) ** 2 / centre**2
        x = np.where(finite, (1 - u) / (1 + u), -1.0)
        own_d = np.ones(omega.size)
        for pole in np.linalg.eigvals(np.asarray(self.file["weights"]["left"]["A"])):
            at = np.abs(1j * np.where(finite, omega, 0.0) - pole) ** 2
            own_d *= np.where(finite, at / (np.where(finite, omega, 0.0) ** 2 + centre**2), 1.0)
        for_d = arnoldi(x, 1.0 / own_d, order)
        for_n = arnoldi(x, 1.0 / (own_d * weight**2), order)
        rows = []
        for ratio, sign in (
            (lower / weight, 1.0),
            (np.sqrt(level) * upper / weight, -1.0),
            (ceiling / weight, -1.0),
        ):
            there = np.isfinite(ratio) & (ratio > 0)
            square = (ratio[there] ** 2)[:, None]
            # sign (N - square D) >= slack, both sides over the larger of 1 and square
            scale = np.maximum(1.0, square)
            rows.append(
                np.hstack(
                    [
                        -sign * for_n[there] / scale,
                        sign * square / scale * for_d[there],
                        np.ones((there.sum(), 1)),
                    ]
                )
            )
        matrix = np.vstack(rows)
        unknowns = matrix.shape[1]
        normal = np.concatenate([np.zeros(order + 1), for_d.mean(axis=0), [0.0]])
        solved = linprog(
            np.append(np.zeros(unknowns - 1), -1.0),
            A_ub=matrix,
            b_ub=np.zeros(len(matrix)),
            A_eq=normal[None],
            b_eq=[1.0],
            bounds=[(None, None)] * unknowns,
            method="highs",
        )
        assert solved.status == 0, solved.message
        return solved.x[-1]


def arnoldi(x, scale, degree):
    """Polynomials in x up to a degree times `scale`, orthonormal over the points.

    P. D. Brubeck, Y. Nakatsukasa, L. N. Trefethen, "Vandermonde with Arnoldi", SIAM Rev. 63, 2021.
    """
    basis = [scale / np.linalg.norm(scale)]
    for _ in range(degree):
        new = x * basis[-1]
        for _ in range(2):
            for old in basis:
                new = new - (old @ new) * old
        basis.append(new / np.linalg.norm(new))
    return np.column_stack(basis) * np.sqrt(x.size)
