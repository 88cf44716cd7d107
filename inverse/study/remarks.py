"""What a reader should know about a design beside its numbers: doubts about what was asked, and close calls."""

from __future__ import annotations

from collections.abc import Iterator

from inverse.evaluation.evaluator import Evaluation
from inverse.study.result import Design
from inverse.units import Kind, format_quantity
from objectives.state import Like
from objectives.transfer import Maxima, TransferCompleteness, TransferTime

MISREAD_UNIT = 1e5
"""A frequency asked for that is off by more than this from all the model can reach is probably a slip of the unit."""

MOST_MAXIMA = 6


def remarks(evaluation: Evaluation, record: Design) -> tuple[str, ...]:
    """Remarks on one design, most important first, each once."""
    return tuple(dict.fromkeys((*_slips_of_units(record), *_doubtful_shapes(evaluation), *_transfers(evaluation))))


def _slips_of_units(record: Design) -> Iterator[str]:
    frequencies = [mode.frequency_hz for mode in record.modes]
    for row in record.objectives:
        wanted = row.asked.get("target") or row.asked.get("at_least") or row.asked.get("at_most")
        if row.unit != "Hz" or not wanted or not frequencies:
            continue
        low, high = min(frequencies), max(frequencies)
        if wanted > MISREAD_UNIT * high or wanted < low / MISREAD_UNIT:
            yield f"`{row.label}` asks for {wanted:.4g} Hz, the modes are at {low:.4g} to {high:.4g} Hz: MHz or mHz?"


def _doubtful_shapes(evaluation: Evaluation) -> Iterator[str]:
    found = evaluation.state.identification if evaluation.state.likes else None
    for like in evaluation.state.likes if found else ():
        if found is not None and found.ambiguous(like)[0]:
            yield (
                f"two modes resemble {_words(like)} almost equally (assurance {found.assurance[like][0]:.3f} and "
                f"{found.runner_up[like][0]:.3f}): name more components, or the mode by its number"
            )


def _words(like: Like) -> str:
    return "{ " + ", ".join(f"{component} = {value:g}" for component, value in like.pattern) + " }"


def _transfers(evaluation: Evaluation) -> Iterator[str]:
    for objective in evaluation.evaluator.objectives:
        if not isinstance(objective, TransferTime | TransferCompleteness):
            continue
        if isinstance(objective, TransferCompleteness) and objective.time is not None:
            continue
        found = objective.maxima(evaluation.state)
        path = f"{objective.source} to {objective.target}"
        if found.at_end[0]:
            yield (
                f"{path}: no maximum within the horizon of {_time(float(found.horizon[0]))} reaches 90 % of the "
                "greatest share; the end of the horizon was taken: give a longer `horizon`"
            )
        elif found.near_switch[0]:
            yield f"{path}: another maximum is nearly as good; a small change of parts may make it the one that counts"
        if maxima := _listed(found):
            yield f"{path}, shares handed over: {maxima}"


def _listed(found: Maxima) -> str:
    """All maxima from 80 % of the greatest on."""
    times, shares = found.of(0)
    listed = [f"{share:.4f} at {_time(t)}" for t, share in zip(times.tolist(), shares.tolist(), strict=True)]
    return ", ".join(listed[:MOST_MAXIMA]) + (", …" if len(listed) > MOST_MAXIMA else "")


def _time(seconds: float) -> str:
    return format_quantity(seconds, Kind.TIME)
