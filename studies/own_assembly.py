"""Build a study in Python: an instrument shelf on two springs with a hung counterweight, swept over the shelf's mass.

For each mass the spring rates are solved for that put bounce and pitch where they are wanted, and the table says
what to order. No study file is involved.
"""

import pandas as pd

from inverse import Study
from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Platform
from inverse.assembly.links import Spring
from inverse.assembly.parameters import Variable
from inverse.units import parse_product
from objectives import Frequency, Like, Target

BOUNCE = Like((("shelf.z", 1.0), ("shelf.ry", 0.0)))
PITCH = Like((("shelf.z", 0.0), ("shelf.ry", 1.0)))


def shelf(mass: float) -> Study:
    """A shelf of 0.8 m whose instruments sit 60 mm off the middle."""
    assembly = Assembly(
        bodies=(Platform(name="shelf", mass=mass, inertia=(mass * 0.25**2,), centre=(0.06,)),),
        links=(
            Spring(name="left", between=("shelf", "ground"), at=-0.4, rate=parse_product("left_rate")),
            Spring(name="right", between=("shelf", "ground"), at=0.4, rate=parse_product("right_rate")),
        ),
    )
    return Study(
        name=f"shelf of {mass:g} kg",
        assembly=assembly,
        variables=(
            Variable(name="left_rate", low=100.0, high=40e3, unit="N/m"),
            Variable(name="right_rate", low=100.0, high=40e3, unit="N/m"),
        ),
        objectives=(
            Frequency(label="bounce", mode=BOUNCE, requirement=Target(3.0, 0.15)),
            Frequency(label="pitch", mode=PITCH, requirement=Target(4.9, 0.3)),
        ),
    )


def main() -> None:
    """Solve each variant and print the table."""
    rows = []
    for mass in (6.0, 9.0, 12.0, 15.0):
        result = shelf(mass).size(seed=1)
        achieved = {row.label: row.achieved for row in result.objectives}
        rows.append({"mass [kg]": mass, "status": str(result.status), **result.variables, **achieved})
    print(pd.DataFrame(rows).to_string(index=False, float_format=lambda v: f"{v:.4g}"))


if __name__ == "__main__":
    main()
