"""A study and what can be done with it; each command is one method of the same name."""

from __future__ import annotations

import platform
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import scipy

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.parameters import Variable
from inverse.assembly.statics import Deflection
from inverse.assembly.terms import Array
from inverse.design.bounds import Budget, Certificate, Range, prove_impossible, reachable_range
from inverse.design.gradient import Outcome, solve_by_gradient
from inverse.design.problem import Problem
from inverse.design.shortfall import Shortfall, explain
from inverse.design.verification import Verification, verify
from inverse.errors import StudyError
from inverse.evaluation.evaluator import Evaluation, Evaluator
from inverse.study.content import SolveSettings, StudyContent, Tolerance
from inverse.study.describe import describe, evaluated
from inverse.study.remarks import remarks
from inverse.study.result import Design, Result, Status
from inverse.study.workshop import contribution_records, errors_of, recentring_record, tolerance_record
from inverse.tolerance.yields import measure_yield
from objectives.base import Objective

VERSION = "0.1.0"

RANGE_BOXES = 2000
"""Boxes looked at for each end of an objective's range."""

PROOF_BOXES = 5000
"""Boxes looked at for a proof that the objectives cannot be met."""

Progress = Callable[[str], None]
"""Called with a few words about what is being done."""


def load_study(path: str | Path) -> Study:
    """Read a study file.

    Raises
    ------
    StudyError
        If the file or what it names is at fault.
    """
    from inverse.study.reading import read_study

    return Study.from_content(read_study(Path(path)))


@dataclass(frozen=True, kw_only=True)
class Study:
    """An assembly, variables and objectives, with the settings of the solver.

    Read one from a file with `load_study`, or build it in Python.

    Examples
    --------
    >>> from inverse.assembly.assembly import Assembly
    >>> from inverse.assembly.bodies import Mass
    >>> from inverse.assembly.links import Spring
    >>> block = Mass(name="block", mass=2.0)
    >>> spring = Spring(name="spring", between=("block", "ground"), rate=8.0)
    >>> study = Study(assembly=Assembly(bodies=(block,), links=(spring,)))
    >>> round(study.modes().modes[0].frequency_hz, 6)
    0.31831
    """

    assembly: Assembly
    variables: tuple[Variable, ...] = ()
    objectives: tuple[Objective, ...] = ()
    deflections: tuple[Deflection, ...] = ()
    solve: SolveSettings = field(default_factory=SolveSettings)
    name: str = "study"
    title: str = ""
    text: str = ""
    warnings: tuple[str, ...] = ()
    tolerances: tuple[Tolerance, ...] = ()
    content: StudyContent | None = None

    @classmethod
    def from_content(cls, content: StudyContent) -> Study:
        """The study that a file states."""
        return cls(
            assembly=content.assembly,
            variables=content.variables,
            objectives=content.objectives,
            deflections=content.deflections,
            solve=content.solve,
            name=content.name,
            title=content.title,
            text=content.text,
            warnings=content.warnings,
            tolerances=content.tolerances,
            content=content,
        )

    @cached_property
    def model(self) -> Model:
        """The assembly as tables of terms."""
        if self.content is not None:
            return self.content.model
        return self.assembly.compile(self.variables, self.deflections)

    def modes(self, design: Mapping[str, float] | None = None, *, seed: int | None = None) -> Result:
        """Modes of the design as it stands, or of given values of the variables, and its objectives judged.

        Raises
        ------
        StudyError
            If a variable has no value, or the design does not rest in stable equilibrium.
        """
        began = time.perf_counter()
        evaluator = Evaluator(self.model, self.objectives)
        evaluation = evaluated(evaluator, self._standing(design))
        self._refuse_unstable(evaluation)
        record = describe(evaluation)
        status = Status.MET if record.met else Status.NOT_MET
        message = _verdict(record) if self.objectives else "modes of the design as it stands"
        return self._result("modes", status, message, record, evaluation, began, seed, route="evaluation")

    def reach(self, *, seed: int | None = None, progress: Progress = lambda _: None) -> Result:
        """What each objective can attain within the ranges, with bounds, and whether all can be met together.

        Impossible with a certificate, met where a design was found, not met where neither is known.
        """
        began = time.perf_counter()
        problem = Problem(Evaluator(self.model, self.objectives))
        rows = []
        for i, objective in enumerate(self.objectives if len(problem.free) else ()):
            progress(f"bounding {objective.label}")
            rows.append(reachable_range(problem, i, budget=Budget(boxes=RANGE_BOXES)))
        progress("looking for a design or a proof that there is none")
        certificate, t, words = self._decided(problem, seed, progress)
        evaluation = evaluated(problem.evaluator, problem.designs(t)[0])
        record = describe(evaluation)
        status = Status.MET if record.met else Status.NOT_MET
        unbounded = [f"{row.unbounded_because}" for row in rows if row.unbounded_because]
        result = self._result(
            "reach",
            Status.IMPOSSIBLE if certificate else status,
            words,
            record,
            evaluation,
            began,
            seed,
            route="bounds",
            certificate=certificate,
            reach=tuple(_reach_row(row) for row in rows),
        )
        return replace(result, warnings=(*result.warnings, *unbounded))

    def _decided(self, problem: Problem, seed: int | None, progress: Progress) -> tuple[Certificate | None, Array, str]:
        """A certificate, or a point that meets everything or comes closest, with what is known in words."""
        if not len(problem.free):
            return None, np.empty(0), "there is nothing to choose"
        verdict = prove_impossible(problem, Budget(boxes=PROOF_BOXES))
        if verdict.certificate is not None and verdict.closest is not None:
            return verdict.certificate, problem.points(verdict.closest[None])[0], verdict.certificate.reason
        if verdict.met_at is not None and problem.all_met(problem.evaluator.at(verdict.met_at).values())[0]:
            return verdict.certificate, problem.points(verdict.met_at[None])[0], "reachable: a design was found"
        outcome = solve_by_gradient(
            problem, seed=self._seed(seed), starts=self.solve.starts, alternatives=0, progress=progress
        )
        if verdict.certificate is not None:
            return verdict.certificate, outcome.closest, verdict.certificate.reason
        known = "reachable: a design was found" if len(outcome.designs) else verdict.message.rstrip(".").lower()
        return None, outcome.closest, known

    def tolerance(self, design: Mapping[str, float] | None = None, *, seed: int | None = None) -> Result:
        """What the tolerances do to the design as it stands, or to given values of the variables.

        The nominal design is judged; the yield does not count for the status.

        Raises
        ------
        StudyError
            If the study states no tolerances, or a variable has no value.
        """
        began = time.perf_counter()
        if not self.tolerances:
            raise StudyError(f"{self.name}: `tolerance` needs at least one [[tolerance]] table")
        evaluator = Evaluator(self.model, self.objectives)
        evaluation = evaluated(evaluator, self._standing(design))
        self._refuse_unstable(evaluation)
        record = describe(evaluation)
        status = Status.MET if record.met else Status.NOT_MET
        shop = tolerance_record(evaluator, evaluation.x[0], self.tolerances, seed=self._seed(seed))
        problem = Problem(evaluator)
        if self.objectives:
            shop["contributions"], shop["remarks"] = contribution_records(
                evaluator, evaluation.x[0], self.tolerances, seed=self._seed(seed)
            )
        if len(problem.free) and self.objectives:
            shop["recentred"] = recentring_record(problem, evaluation.x[0], self.tolerances, seed=self._seed(seed))
        message = f"nominal design: {_verdict(record)}; {_yield_words(shop)}"
        if recentred := shop.get("recentred"):
            message += f"; re-centred, {100 * recentred['yield_after']:.2f} % pass"
        return self._result(
            "tolerance", status, message, record, evaluation, began, seed, route="evaluation", tolerance=shop
        )

    def size(self, *, seed: int | None = None, progress: Progress = lambda _: None) -> Result:
        """Find parts whose assembly does what the objectives ask.

        Raises
        ------
        StudyError
            If the study asks for a route that is not there, or its only design does not rest.
        """
        began = time.perf_counter()
        problem = Problem(Evaluator(self.model, self.objectives))
        if not len(problem.free):
            outcome = Outcome(np.empty((0, 0)), np.empty(0), "there is nothing to choose")
        elif not self.objectives:
            middle = (problem.lower + problem.upper) / 2
            standing = middle if problem.start is None else problem.start
            outcome = Outcome(standing[None], standing, "there is no objective to choose by")
        else:
            self._refuse_route()
            outcome = solve_by_gradient(
                problem,
                seed=self._seed(seed),
                starts=self.solve.starts,
                alternatives=self.solve.alternatives,
                progress=progress,
            )
        return self._sized(problem, outcome, began, seed, progress)

    def _sized(self, problem: Problem, outcome: Outcome, began: float, seed: int | None, progress: Progress) -> Result:
        shop: dict[str, Any] | None = None
        if self.tolerances and len(outcome.designs):
            progress("drawing builds within the tolerances")
            outcome, shop = self._by_yield(problem, outcome, self._seed(seed))
        evaluation = evaluated(problem.evaluator, problem.designs(outcome.closest)[0])
        if not len(problem.free):
            self._refuse_unstable(evaluation)
        record = describe(evaluation)
        verification, shortfall, certificate = None, None, None
        if evaluation.state.modes.stable[0]:
            progress("checking by a second path")
            verification = verify(evaluation)
            if not record.met and len(problem.free):
                progress("looking for what would help")
                shortfall = explain(problem, outcome.closest, self._seed(seed))
                progress("looking for a proof that it cannot be done")
                certificate = prove_impossible(problem, Budget(boxes=PROOF_BOXES)).certificate
        confirmed = verification is not None and verification.agrees
        status = Status.MET if record.met and confirmed else Status.NOT_MET
        if certificate is not None:
            status = Status.IMPOSSIBLE
        others = [describe(evaluated(problem.evaluator, problem.designs(t)[0])) for t in outcome.designs[1:]]
        words = _message(record, shortfall, verification, outcome)
        if certificate is not None:
            words = f"{certificate.reason}; {words}"
        if shop is not None:
            ranked = ", the best of the designs found" if len(outcome.designs) > 1 else ""
            words = f"{words}; {_yield_words(shop)}{ranked}"
        return self._result(
            "size",
            status,
            words,
            record,
            evaluation,
            began,
            seed,
            route="gradient" if len(problem.free) else "evaluation",
            alternatives=tuple(others),
            shortfall=shortfall,
            verification=verification,
            certificate=certificate,
            tolerance=shop,
        )

    def _by_yield(self, problem: Problem, outcome: Outcome, seed: int) -> tuple[Outcome, dict[str, Any]]:
        """Designs in the order of the share of builds that pass, and what the shop does to the first."""
        x = problem.designs(outcome.designs)
        evaluator = problem.evaluator
        shares = [
            measure_yield(
                evaluator, one, errors_of(self.tolerances, self.model, evaluator.nominal(one[None])[0]), seed=seed
            ).share
            for one in (x if len(x) > 1 and not problem.wishes else x[:1])
        ]
        order = np.argsort(-np.array(shares), kind="stable")
        designs = np.concatenate([outcome.designs[order], outcome.designs[len(order) :]])
        shop = tolerance_record(evaluator, problem.designs(designs[:1])[0], self.tolerances, seed=seed)
        return Outcome(designs, designs[0], outcome.stopped), shop

    def _seed(self, seed: int | None) -> int:
        return self.solve.seed if seed is None else seed

    def _standing(self, design: Mapping[str, float] | None) -> Array:
        values = {v.name: v.value for v in self.variables} | dict(design or {})
        missing = [v.name for v in self.variables if values.get(v.name) is None]
        if missing:
            raise StudyError(
                f"{self.name}: no value for {', '.join(f'`{name}`' for name in missing)}; give each a `start`, or take "
                "the design from an earlier run with --design DIR"
            )
        return np.array([values[v.name] for v in self.variables], float)

    def _refuse_unstable(self, evaluation: Evaluation) -> None:
        if evaluation.state.modes.stable[0]:
            return
        modes = evaluation.state.modes
        if not np.isfinite(modes.eigenvalues[0]).all():
            raise StudyError(
                f"{self.name}: the assembly has no rest position at this design, or a mass is not positive"
            )
        j = int(np.argmin(modes.eigenvalues[0]))
        rows = evaluation.state.matrices.component_rows(names := tuple(self.model.components))[0]
        worst = names[int(np.argmax(np.abs(rows @ modes.shapes[0, :, j])))]
        raise StudyError(
            f"{self.name}: the assembly topples: its rest position is no stable equilibrium, and `{worst}` moves away "
            "fastest; stiffen its links, lower its centre of mass or widen the support"
        )

    def _refuse_route(self) -> None:
        if self.solve.route not in ("auto", "gradient"):
            raise StudyError(
                f'{self.name}: solve.route = "{self.solve.route}" is not in this version; use "auto" or "gradient"'
            )

    def _result(
        self,
        command: str,
        status: Status,
        message: str,
        record: Design,
        evaluation: Evaluation,
        began: float,
        seed: int | None,
        **rest: Any,
    ) -> Result:
        return Result(
            study=self.name,
            title=self.title,
            command=command,
            status=status,
            message=message,
            seed=self._seed(seed),
            design=record,
            warnings=(*self.warnings, *remarks(evaluation, record)),
            modal_solves=evaluation.evaluator.modal_solves,
            wall_s=time.perf_counter() - began,
            versions={
                "modewright": VERSION,
                "numpy": np.__version__,
                "scipy": scipy.__version__,
                "python": platform.python_version(),
            },
            **rest,
        )


def _reach_row(row: Range) -> dict[str, Any]:
    return {
        "label": row.label,
        "unit": row.unit,
        "found_low": row.found_low,
        "found_high": row.found_high,
        "certain_low": row.certain_low if np.isfinite(row.certain_low) else None,
        "certain_high": row.certain_high if np.isfinite(row.certain_high) else None,
    }


def _yield_words(shop: Mapping[str, Any]) -> str:
    share, low, high = (100 * shop[key] for key in ("yield", "yield_low", "yield_high"))
    return f"{share:.2f} % of builds pass ({low:.2f} to {high:.2f} %, {shop['builds']} builds)"


def _verdict(record: Design) -> str:
    judged = [row for row in record.objectives if row.met is not None]
    missed = [row.label for row in judged if not row.met]
    if missed:
        return f"missed: {', '.join(missed)}"
    return "every objective is met" if judged else "no objective has a window or a limit to judge by"


def _message(record: Design, shortfall: Shortfall | None, verification: Verification | None, outcome: Outcome) -> str:
    if verification is None:
        return outcome.stopped
    if record.met and not verification.agrees:
        return "the second path does not confirm the design; it is not called met"
    if shortfall is None:
        return _verdict(record)
    parts = [_verdict(record), outcome.stopped]
    if shortfall.held:
        ends = ", ".join(f"`{name}` ({end})" for name, end in shortfall.held.items())
        parts.append(f"at the end of their range: {ends}")
    if shortfall.opposed:
        parts.append("pulling against each other: " + ", ".join(f"{a} and {b}" for a, b in shortfall.opposed))
    if shortfall.relaxations:
        parts.append("what would do: " + "; or ".join(shortfall.relaxations))
    return "; ".join(parts)
