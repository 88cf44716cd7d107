"""Size the lantern pair and draw how its lanterns exchange their swing.

python studies/exchange.py [STUDY] [PICTURE]
"""

import sys
from pathlib import Path

import matplotlib as mpl
import numpy as np
from matplotlib.figure import Figure

from inverse import load_study
from inverse.evaluation.evaluator import Evaluator
from objectives.state import Eigenvalues, OwnerForm, ReleasedAmplitudes
from objectives.transfer import Exchange

HERE = Path(__file__).parent


def shares(study, result, source: str, seconds: float) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Energy share of every body after one of them is displaced and released."""
    state = Evaluator(study.model, ()).at(np.array(list(result.variables.values()))).state
    omega, amplitudes = np.sqrt(state[Eigenvalues()][0]), state[ReleasedAmplitudes(source)][0]
    t = np.linspace(0.0, seconds, 1200)
    bodies = [body for body, components in study.model.bodies.items() if components]
    return t, {body: Exchange(omega, amplitudes, state[OwnerForm(body)][0]).share(t)[0] for body in bodies}


def main() -> None:
    """Solve, compute and draw."""
    path = Path(sys.argv[1]) if len(sys.argv) > 1 else HERE / "lantern_pair.toml"
    picture = Path(sys.argv[2]) if len(sys.argv) > 2 else HERE / "exchange.svg"
    study = load_study(path)
    result = study.size().require_success()
    first = next(iter(study.model.components))
    t, by_body = shares(study, result, first, 100.0)

    figure = Figure(figsize=(7.2, 2.6), layout="constrained")
    axes = figure.subplots()
    for (body, share), style in zip(by_body.items(), ("-", "--", "-.", ":", "-"), strict=False):
        axes.plot(t, share, style, label=body)
    axes.set(xlabel="time after release [s]", ylabel="share of the energy", xlim=(0, t[-1]), ylim=(0, 1.02))
    figure.legend(loc="outside upper right", frameon=False, ncols=len(by_body))
    # Without a date and with names that do not change, the same study gives the same file.
    with mpl.rc_context({"svg.hashsalt": "exchange"}):
        figure.savefig(picture, metadata={"Date": None})
    print(f"{picture}: {study.title}")


if __name__ == "__main__":
    main()
