"""Every rule of the study file has its own check, and its message says where, what was expected and what was found.

One row changes the text that holds one of each kind: what is replaced, by what, and one line of the message, where …
stands for anything. What is refused follows the format of the study file; the wording is our own.
"""

import re

import pytest

from inverse.errors import StudyError
from inverse.study.reading import parse_study, read_study

RULES = [
    # structure
    (
        "quantity without quotes",
        'mass = "6.5 kg"',
        "mass = 6.5 kg",
        "this is no TOML: Expected newline or end of document after a statement (at line 43, "
        'column 12); quantities stand in quotes, as in mass = "6.5 kg"',
    ),
    (
        "table where text is expected",
        'title = "One of each"',
        "title = { a = 1 }",
        "`title`: expected a text, found a table",
    ),
    (
        "date where a quantity is expected",
        'mass = "6.5 kg"',
        "mass = 1979-05-27",
        'body "east", `mass`: expected a mass greater than zero, such as "6.5 kg", found a date or time',
    ),
    (
        "array where a quantity is expected",
        'mass = "6.5 kg"',
        'mass = ["6.5 kg"]',
        'body "east", `mass`: expected a mass greater than zero, such as "6.5 kg", found an array of 1',
    ),
    (
        "unknown section",
        "[solve]",
        "[solver]",
        "expected a key that is known here, found 'solver'; did you mean \"solve\"?",
    ),
    (
        "unknown key",
        'rod_mass = "0.4 kg"',
        'rodmass = "0.4 kg"',
        'body "east": expected a key that is known here, found \'rodmass\'; did you mean "rod_mass"?',
    ),
    (
        "unknown kind of body",
        'kind = "pendulum"',
        'kind = "pendulam"',
        'body "east", `kind`: expected one of "mass", "pendulum", "rotor", "platform", "joint", '
        "found 'pendulam'; did you mean \"pendulum\"?",
    ),
    (
        "unknown kind of link",
        'kind = "gear"',
        'kind = "gears"',
        'link "mesh", `kind`: expected one of "spring", "mount", "damper", "shaft", "gear", '
        '"rod", found \'gears\'; did you mean "gear"?',
    ),
    (
        "unknown kind of objective",
        'kind = "beat period"',
        'kind = "beat_period"',
        'objective[5], `kind`: expected one of "frequency", …, found \'beat_period\'; did you mean "beat period"?',
    ),
    (
        "kind that is no text",
        'kind = "gear"',
        "kind = 3",
        'link "mesh", `kind`: expected one of "spring", "mount", "damper", "shaft", "gear", "rod", found 3',
    ),
    (
        "missing kind",
        'kind = "gear"\n',
        "",
        'link "mesh", `kind`: this key is missing: one of "spring", "mount", "damper", "shaft", "gear", "rod"',
    ),
    (
        "missing key",
        'mass = "6.5 kg"\n',
        "",
        'body "east", `mass`: this key is missing: a mass, such as "6.5 kg", or a product of variables; of the bob',
    ),
    (
        "single brackets",
        "[[matrix]]",
        "[matrix]",
        "`matrix`: expected tables [[matrix]], found a table; write [[matrix]] with double brackets",
    ),
    (
        "double brackets",
        "[solve]",
        "[[solve]]",
        "`solve`: expected a table, found an array of 1; write [solve] with single brackets",
    ),
    (
        "text where a table is expected",
        '[variables.steel]\nvalue = "79.3 GPa"',
        '[variables]\nsteel = "79.3 GPa"',
        "variables.steel: expected a table, found '79.3 GPa'",
    ),
    # numbers and units
    (
        "bare number",
        'mass = "6.5 kg"',
        "mass = 6.5",
        'body "east", `mass`: expected a mass, such as "6.5 kg", found the bare number 6.5; its '
        'unit is missing, as in "6.5 kg"',
    ),
    (
        "comma",
        'mass = "6.5 kg"',
        'mass = "6,5 kg"',
        'body "east", `mass`: expected a mass, such as "6.5 kg", found \'6,5 kg\'; decimals are '
        "written with a point, and thousands with nothing between",
    ),
    (
        "wrong unit",
        'mass = "6.5 kg"',
        'mass = "6.5 m"',
        'body "east", `mass`: expected a mass, such as "6.5 kg", found \'6.5 m\', a length in m',
    ),
    (
        "unknown unit",
        'mass = "6.5 kg"',
        'mass = "6.5 KG"',
        'body "east", `mass`: expected a mass, such as "6.5 kg", found the unknown unit \'KG\' in '
        "'6.5 KG'; did you mean \"kg\"?",
    ),
    (
        "not a number",
        "ratio = -0.4",
        "ratio = nan",
        'link "mesh", `ratio`: expected a pure number, such as 0.3 or "2 %", found a number that is not finite',
    ),
    (
        "infinite",
        "ratio = -0.4",
        "ratio = -inf",
        'link "mesh", `ratio`: expected a pure number, such as 0.3 or "2 %", found a number that is not finite',
    ),
    (
        "boolean",
        "ratio = -0.4",
        "ratio = true",
        'link "mesh", `ratio`: expected a pure number, such as 0.3 or "2 %", found true',
    ),
    (
        "too large",
        'mass = "6.5 kg"',
        'mass = "1e80 kg"',
        'body "east", `mass`: expected a mass greater than zero, such as "6.5 kg", found \'1e80 '
        "kg'; no part is that large or small",
    ),
    (
        "negative mass",
        'mass = "6.5 kg"',
        'mass = "-6.5 kg"',
        'body "east", `mass`: expected a mass greater than zero, such as "6.5 kg", found \'-6.5 kg\'',
    ),
    (
        "zero length",
        'length = "0.4 m"',
        'length = "0 m"',
        'body "low west", `length`: expected a length greater than zero, such as "20 mm", found \'0 m\'',
    ),
    (
        "negative rod mass",
        'rod_mass = "0.4 kg"',
        'rod_mass = "-0.4 kg"',
        'body "east", `rod_mass`: expected a mass of zero or more, such as "6.5 kg", found \'-0.4 kg\'',
    ),
    (
        "half a piece",
        "count = 4",
        "count = 4.5",
        'link "feet", `count`: expected how many, a whole number of 1 or more, found 4.5',
    ),
    (
        "negative damping ratio",
        "damping_ratio = 0.002",
        "damping_ratio = -0.002",
        'body "east", `damping_ratio`: expected a pure number of zero or more, such as 0.3 or "2 %", found -0.002',
    ),
    (
        "swing of a wrong unit",
        'swing = "4 deg"',
        'swing = "4 kg"',
        'body "east", `swing`: expected an amplitude, such as "8 deg" or "40 mm", found \'4 kg\'',
    ),
    (
        "rate of a shaft",
        'rate = "14 kN m"',
        'rate = "14 kN/m"',
        'link "coupling", `rate`: expected a torsional rate, such as "350 N m/rad", found \'14 kN/m\', a rate in N/m',
    ),
    (
        "coefficient of a damper between points",
        'coefficient = "4 N s/m"',
        'coefficient = "4 N m s/rad"',
        'link "dashpot", `coefficient`: expected a damping coefficient, such as "4 N s/m", found '
        "'4 N m s/rad', a torsional damping in N m s/rad; it is between points",
    ),
    (
        "coefficient of a damper between rotors",
        'coefficient = "0.1 N m s/rad"',
        'coefficient = "0.1 N s/m"',
        'link "brake", `coefficient`: expected a torsional damping, such as "0.1 N m s/rad", '
        "found '0.1 N s/m', a damping coefficient in N s/m; it is between rotors",
    ),
    # variables and products
    (
        "unknown variable",
        'length = "arm"',
        'length = "arn"',
        'body "east", `length`: expected the name of a variable, found \'arn\'; did you mean "arm"?',
    ),
    (
        "quantity in a product",
        'length = "0.98 * arm"',
        'length = "arm * 3 mm"',
        'body "west", `length`: expected a product of names and numbers, such as "0.98 * arm", '
        "found 'arm * 3 mm'; * or / is missing before 'mm'; no units stand inside a product",
    ),
    (
        "variable of another unit",
        'length = "arm"',
        'length = "rate"',
        "body \"east\", `length`: expected a length, found 'rate', a rate in N/m",
    ),
    (
        "product of another unit",
        "wire^4 /",
        "wire^3 /",
        "link \"tie\", `rate`: expected a rate, found '0.125 * steel * wire^3 / (coil^3 * turns)', a modulus in Pa",
    ),
    (
        "length that may be zero",
        'length = "arm"',
        'length = "offset"',
        "body \"east\", `length`: expected a length greater than zero, found 'offset'; the range "
        "of `offset` reaches zero or below",
    ),
    (
        "root of what may be negative",
        'at = "0.5 m"',
        'at = "offset^2 / arm^(1/2) / offset^0.5"',
        "link \"right\", `at`: expected a length, found 'offset^2 / arm^(1/2) / offset^0.5'; "
        "`offset` may be zero or negative and has whole powers of 1 or more only",
    ),
    (
        "negative factor",
        'length = "0.98 * arm"',
        'length = "-0.98 * arm"',
        "body \"west\", `length`: expected a length greater than zero, found '-0.98 * arm'",
    ),
    (
        "product without bounds",
        'rate = "9000 * rate"',
        'rate = "rate * arm^90 / arm^90 * share^100 * 1e49"',
        'link "right", `rate`: expected a rate, found \'rate * arm^90 / arm^90 * share^100 * '
        "1e49'; over the ranges of its variables it gets too large or too small",
    ),
    (
        "range and value",
        'value = "79.3 GPa"',
        'value = "79.3 GPa"\nrange = ["1 GPa", "2 GPa"]',
        "variables.steel: expected either `range` or `value`, found both",
    ),
    (
        "neither range nor value",
        'value = "79.3 GPa"\n',
        "",
        "variables.steel: expected either `range` or `value`, found neither",
    ),
    (
        "empty range",
        '["1.2 m", "2.6 m"]',
        '["2.6 m", "2600 mm"]',
        'variables.arm, `range`: expected [lowest, highest] with units, such as ["1.2 m", "2.6 '
        "m\"], found the empty range ['2.6 m', '2600 mm']; a variable that is fixed has a `value` "
        "instead",
    ),
    (
        "reversed range",
        '["1.2 m", "2.6 m"]',
        '["2.6 m", "1.2 m"]',
        'variables.arm, `range`: expected [lowest, highest] with units, such as ["1.2 m", "2.6 '
        "m\"], found ['2.6 m', '1.2 m']; the range is reversed",
    ),
    (
        "range in two units",
        '["1.2 m", "2.6 m"]',
        '["1.2 m", "2.6 s"]',
        "variables.arm, `range`: expected two ends of the same unit, found ['1.2 m', '2.6 s']",
    ),
    (
        "range of one",
        '["1.2 m", "2.6 m"]',
        '["1.2 m"]',
        'variables.arm, `range`: expected [lowest, highest] with units, such as ["1.2 m", "2.6 '
        'm"], found an array of 1',
    ),
    (
        "start outside",
        'start = "2 m"',
        'start = "2.7 m"',
        "variables.arm, `start`: expected a start within the range, 1.2 to 2.6 m, found 2.7 m",
    ),
    (
        "start in another unit",
        'start = "2 m"',
        'start = "2 s"',
        "variables.arm, `start`: expected a value in m, found one in s",
    ),
    (
        "start of a fixed variable",
        'value = "20 mm"',
        'value = "20 mm"\nstart = "20 mm"',
        "variables.coil, `start`: expected a `range` beside `start`, found `value`; a fixed variable has no start",
    ),
    (
        "name of a variable",
        "[variables.steel]",
        '[variables."2 steel"]',
        "variables.2 steel: expected a variable's name of letters, digits and _, beginning with "
        "a letter, found '2 steel'",
    ),
    (
        "unknown stock",
        'stock = "springs"',
        'stock = "spring"',
        "variables.rate, `stock`: expected the name of a [stock.NAME] table, found 'spring'; did you mean \"springs\"?",
    ),
    (
        "stock of another unit",
        'stock = "springs"',
        'stock = "preferred"',
        "variables.rate, `stock`: expected values in N/m, found values in m in stock.preferred",
    ),
    # stock
    (
        "two sources of stock",
        "values = [4, 6, 8, 10]",
        'values = [4, 6, 8, 10]\nseries = "R20"',
        "stock.counts: expected one of `file`, `values`, `series`, found values and series",
    ),
    (
        "no source of stock",
        "values = [4, 6, 8, 10]",
        "",
        "stock.counts: expected one of `file`, `values`, `series`, found none of them",
    ),
    (
        "unknown series",
        'series = "R20"',
        'series = "R25"',
        'stock.preferred, `series`: expected one of "R5", "R10", "R20", "R40", "R80", found '
        "'R25'; did you mean \"R5\"?",
    ),
    (
        "series without end",
        'to = "4 mm"\n\n',
        "\n\n",
        "stock.preferred, `to`: expected `from` and `to` with a `series` only, found none",
    ),
    (
        "end without series",
        'file = "springs.csv"',
        'file = "springs.csv"\nto = "4 N/m"',
        "stock.springs, `to`: expected `from` and `to` with a `series` only, found one",
    ),
    (
        "series reversed",
        'from = "1 mm"\nto = "4 mm"',
        'from = "4 mm"\nto = "1 mm"',
        "stock.preferred, `from`: expected a smallest value above zero and below `to`, found 0.004",
    ),
    (
        "series in two units",
        'from = "1 mm"',
        'from = "1 s"',
        "stock.preferred, `to`: expected a value in s, found one in m",
    ),
    (
        "no values",
        "values = [4, 6, 8, 10]",
        "values = []",
        "stock.counts, `values`: expected an array of one or more quantities, found an empty array",
    ),
    (
        "values of two kinds",
        "values = [4, 6, 8, 10]",
        'values = [4, "6 m"]',
        "stock.counts, `values`: expected values of one unit, found several",
    ),
    (
        "missing file",
        'file = "springs.csv"',
        'file = "sprigns.csv"',
        "stock.springs, sprigns.csv: expected a file in the study's folder, or an absolute path, "
        "found 'sprigns.csv'; there is no such file",
    ),
    (
        "file outside the folder",
        'file = "springs.csv"',
        'file = "../springs.csv"',
        "stock.springs, ../springs.csv: expected a file in the study's folder, or an absolute "
        "path, found '../springs.csv'; the path leads out of the folder",
    ),
    # parts
    (
        "name twice",
        'name = "pump"',
        'name = "motor"',
        "body[7], `name`: expected a name of its own, found 'motor' again",
    ),
    (
        "link named as a body",
        'name = "tie"',
        'name = "east"',
        "link[1], `name`: expected a name of its own, found 'east' again",
    ),
    (
        "the name ground",
        'name = "pump"',
        'name = "ground"',
        "body \"ground\", `name`: expected the name of a part, found 'ground'; ground is what does not move",
    ),
    (
        "name with a dot",
        'name = "pump"',
        'name = "pump.1"',
        'body "pump.1", `name`: expected a name of letters, digits, spaces, - and _, beginning '
        "with a letter or digit, found 'pump.1'",
    ),
    (
        "empty name",
        'name = "pump"',
        'name = ""',
        "body[7], `name`: expected a name of letters, digits, spaces, - and _, beginning with a "
        "letter or digit, found an empty text",
    ),
    (
        "unknown end",
        'between = ["cart", "ground"]',
        'between = ["card", "ground"]',
        'link "wall", `between`: expected the name of a body, or "ground", found \'card\'; did you mean "cart"?',
    ),
    (
        "one end",
        'between = ["cart", "ground"]',
        'between = ["cart"]',
        'link "wall", `between`: expected an array of 2 names, such as ["east", "west"] or '
        '["east", "ground"], found an array of 1',
    ),
    (
        "same end twice",
        'between = ["cart", "ground"]',
        'between = ["cart", "cart"]',
        "link \"wall\", `between`: expected two ends, each once, found 'cart' twice",
    ),
    (
        "spring on a rotor",
        'between = ["cart", "ground"]',
        'between = ["motor", "ground"]',
        'link "wall", `between`: expected no rotor at the ends, found a rotor and the ground; '
        "between rotors use a shaft or a gear",
    ),
    (
        "shaft on a mass",
        'between = ["motor", "ground"]',
        'between = ["cart", "ground"]',
        'link "coupling", `between`: expected rotors at the ends, found a mass and the ground',
    ),
    (
        "gear on a mass",
        'between = ["motor", "pump"]',
        'between = ["motor", "cart"]',
        'link "mesh", `between`: expected two rotors at the ends, found a rotor and a mass; '
        "between rotors use a shaft or a gear",
    ),
    (
        "rod on a mass",
        'between = ["foot", "roller"]',
        'between = ["foot", "cart"]',
        'link "bottom", `between`: expected two joints at the ends, found a joint and a mass',
    ),
    (
        "damper from rotor to mass",
        'between = ["pump", "ground"]',
        'between = ["pump", "cart"]',
        'link "brake", `between`: expected rotors, or no rotor at the ends, found a rotor and a '
        "mass; between rotors use a shaft or a gear",
    ),
    (
        "gear of no ratio",
        "ratio = -0.4",
        "ratio = 0",
        'link "mesh", `ratio`: expected a ratio other than zero, found 0',
    ),
    (
        "hung from nothing",
        'hung_from = "west"',
        'hung_from = "wets"',
        'body "low west", `hung_from`: expected the name of a body, found \'wets\'; did you mean "west"?',
    ),
    (
        "hung from a deck",
        'hung_from = "west"',
        'hung_from = "deck"',
        'body "low west", `hung_from`: expected a pendulum or a mass that moves horizontally, '
        "found 'deck'; this one gives its swing no first-order coupling",
    ),
    (
        "hung in a circle",
        'length = "0.98 * arm"',
        'length = "0.98 * arm"\nhung_from = "low west"',
        'body "west", `hung_from`: expected a pendulum that hangs from above, found a circle, west → low west → west',
    ),
    (
        "place on a mass",
        'between = ["cart", "ground"]',
        'between = ["cart", "ground"]\nat = "1 m"',
        'link "wall", `at`: expected a pendulum or a platform at one of the ends, found a mass '
        "and the ground; leave it out",
    ),
    (
        "place by body that is no end",
        'west = "0.5 m" }',
        'cart = "0.5 m" }',
        "link \"tie\", `at.cart`: expected a body at one of its ends, found 'cart'; there is east, west",
    ),
    (
        "place on the ground",
        'at = ["-0.5 m", "-0.1 m"]',
        'at = { ground = "1 m" }',
        'link "left", `at.ground`: expected a pendulum or a platform, found the ground',
    ),
    (
        "two numbers on a pendulum",
        'east = "0.6 m"',
        'east = ["0.6 m", "0 m"]',
        "link \"tie\", `at.east`: expected one depth below the pivot on a pendulum 'east', found 2 numbers",
    ),
    (
        "three numbers on a plane platform",
        '["-0.5 m", "-0.1 m"]',
        '["-0.5 m", "0 m", "-0.1 m"]',
        "link \"left\", `at`: expected x or [x, z] on a platform 'stage', found 3 numbers; give it by body, at = { … }",
    ),
    (
        "two numbers on a platform in space",
        '["-0.4 m", "0.3 m", "-0.08 m"]',
        '["-0.4 m", "0.3 m"]',
        "link \"mount a\", `at`: expected [x, y, z] on a platform 'bench', found 2 numbers; give "
        "it by body, at = { … }",
    ),
    (
        "direction of zeros",
        "direction = [0, 1]",
        "direction = [0, 0]",
        'link "left", `direction`: expected a direction, such as [0, 1], found nothing but zeros',
    ),
    (
        "direction of four",
        "direction = [0, 1]",
        "direction = [0, 1, 0, 0]",
        'link "left", `direction`: expected an array of 2 or 3 pure numbers (x, z or x, y, z), found an array of 4',
    ),
    (
        "four rates",
        '["20 kN/m", "14 kN/m"]',
        '["20 kN/m", "14 kN/m", "1 kN/m", "1 kN/m"]',
        'link "mount a", `rates`: expected an array of 2 or 3 rates (axial, lateral), found an array of 4',
    ),
    (
        "two moments of inertia",
        'inertia = "21 kg m^2"',
        'inertia = ["21 kg m^2", "21 kg m^2"]',
        'body "stage", `inertia`: expected one, three or six moments of inertia (xx yy zz xy yz '
        "zx), found an array of 2",
    ),
    (
        "inertia no body has",
        '["9.5 kg m^2", "21 kg m^2", "27 kg m^2"',
        '["9.5 kg m^2", "21 kg m^2", "37 kg m^2"',
        'body "bench", `inertia`: expected moments of inertia of a body, none of the principal '
        "ones greater than the two others together, found principal moments 9.49768, 21.0009 and "
        "37.0015 kg m^2; the last three are entries of the inertia matrix, with its sign",
    ),
    (
        "centre in space of a plane platform",
        'centre = ["offset", "0.1 m"]',
        'centre = ["offset", "0 m", "0.1 m"]',
        'body "stage", `centre`: expected one (x) or two (x, z) coordinates in the plane, found '
        "3; one moment of inertia makes it a plane platform",
    ),
    (
        "one coordinate of a joint",
        'position = ["1 m", "0 m"]',
        'position = ["1 m"]',
        'body "roller", `position`: expected an array of 2 or 3 coordinates (x, z or x, y, z), found an array of 1',
    ),
    (
        "fixed along no axis",
        'fixed = ["z"]',
        'fixed = ["w"]',
        'body "roller", `fixed`: expected one of "x", "y", "z", found \'w\'',
    ),
    (
        "fixed across the plane",
        'fixed = ["z"]',
        'fixed = ["y"]',
        'body "roller", `fixed`: expected axes among x and z for a joint in the plane, found y',
    ),
    (
        "mass that moves slantwise",
        'moves = "vertical"',
        'moves = "up"',
        'body "deck", `moves`: expected one of "horizontal", "vertical", found \'up\'',
    ),
    (
        "gravity upward",
        'gravity = { latitude = "54.3 deg", height = "12 m" }',
        'gravity = "-9.81 m/s^2"',
        "`gravity`: expected an acceleration of zero or more, such as \"9.81 m/s^2\", found '-9.81 m/s^2'",
    ),
    (
        "latitude alone",
        'height = "12 m" }',
        "}",
        "this is no TOML: Invalid initial character for a key part (at line 3, column 36)",
    ),
    (
        "latitude beyond the pole",
        "54.3 deg",
        "95 deg",
        "`gravity`: expected a latitude from -90 deg to 90 deg, found 95 deg",
    ),
    # imported matrices
    (
        "missing matrix",
        'mass = "mass.mtx"',
        'mass = "mas.mtx"',
        'matrix "box", `mass`: expected a file in the study\'s folder, or an absolute path, found '
        "'mas.mtx'; there is no such file",
    ),
    (
        "no matrix",
        'mass = "mass.mtx"\nstiffness = "stiffness.mtx"\nstiffness_times = "share"\n',
        "",
        'matrix "box": expected a file for `mass`, `stiffness` or `damping`, found none',
    ),
    (
        "times without a matrix",
        "stiffness_times",
        "damping_times",
        'matrix "box", `damping_times`: expected a matrix `damping` to multiply, found none',
    ),
    (
        "labels for another size",
        'labels = ["n1", "n2"]',
        'labels = ["n1", "n2", "n3"]',
        'matrix "box", `mass`: expected a real 3 × 3 matrix in Matrix Market format, one row per label, found 2 × 2',
    ),
    (
        "label twice",
        'labels = ["n1", "n2"]',
        'labels = ["n2", "n2"]',
        "matrix \"box\", `labels`: expected labels, each once, found 'n2' twice",
    ),
    (
        "label that is a platform",
        'labels = ["n1", "n2"]',
        'labels = ["stage", "n2"]',
        "matrix \"box\", `labels`: expected labels, or bodies with one component x, found 'stage', "
        "which is another part",
    ),
    (
        "file that is no matrix",
        'mass = "mass.mtx"',
        'mass = "springs.csv"',
        'matrix "box", `mass`: expected a real 2 × 2 matrix in Matrix Market format, one row per '
        "label, found a file that cannot be read as one; Line 1: Not a Matrix Market file. "
        "Missing banner.",
    ),
    # objectives
    (
        "no requirement",
        'target = "0.36 Hz"\nwithin = "0.5 %"\n',
        "",
        "objective[1]: expected exactly one of `target` with `within`, `at_least`, `at_most`, "
        "`minimise`, `maximise`, found none of them",
    ),
    (
        "two requirements",
        'target = "0.36 Hz"',
        'target = "0.36 Hz"\nminimise = true',
        "objective[1]: expected exactly one of `target` with `within`, `at_least`, `at_most`, "
        "`minimise`, `maximise`, found `target` and `minimise`",
    ),
    (
        "target without window",
        'within = "0.5 %"\n',
        "",
        'objective[1], `within`: expected `within` beside `target`, found none; such as within = "1 %"',
    ),
    (
        "window without target",
        'at_most = "4 s"',
        'at_most = "4 s"\nwithin = "1 s"',
        'objective[3], `target`: expected `target` beside `within`, found none; such as within = "1 %"',
    ),
    (
        "minimise not",
        "minimise = true",
        "minimise = false",
        "objective[19], `minimise`: expected true, found false; leave it out where it does not hold",
    ),
    (
        "window of zero",
        'within = "0.5 %"',
        'within = "0 Hz"',
        "objective[1], `within`: expected a window greater than zero, found '0 Hz'",
    ),
    (
        "window in another unit",
        'within = "0.5 %"',
        'within = "0.5 s"',
        'objective[1], `within`: expected the window of a frequency, such as "0.36 Hz", or a '
        "share of it, \"2 %\", found '0.5 s', a time in s",
    ),
    (
        "frequency where a time is asked",
        'target = "40 s"',
        'target = "0.025 Hz"',
        "objective[5], `target`: expected a time, such as \"20 s\", found '0.025 Hz', a frequency "
        'in Hz; for a difference of frequencies use kind = "splitting"',
    ),
    (
        "share above one",
        'at_least = "20 %"',
        'at_least = "120 %"',
        "objective[12], `at_least`: expected a pure number up to 1, found '120 %'; a share is a "
        'number, 0.95, or "95 %"',
    ),
    (
        "weight of zero",
        "weight = 2",
        "weight = 0",
        'objective[1], `weight`: expected a pure number greater than zero, such as 0.3 or "2 %", found 0',
    ),
    (
        "mode zero",
        "mode = 1",
        "mode = 0",
        "objective[1], `mode`: expected the number of a mode, a whole number from 1 to 1000000, found 0",
    ),
    (
        "mode beyond the coordinates",
        "mode = 1",
        "mode = 40",
        "objective[1], `mode`: expected a mode from 1 to 19, the number of coordinates, found 40",
    ),
    (
        "mode of one component",
        "like = { east = 1, west = -1 }",
        "like = { east = 1 }",
        "objective[2], `mode`: expected a table of two or more bodies or components, such as { "
        "east = 1, west = -1 }, found a table of one",
    ),
    (
        "mode of zeros",
        "like = { east = 1, west = -1 }",
        "like = { east = 0, west = 0 }",
        "objective[2], `mode`: expected a table of two or more bodies or components, such as { "
        "east = 1, west = -1 }, found nothing but zeros",
    ),
    (
        "mode of an unknown body",
        "like = { east = 1, west = -1 }",
        "like = { east = 1, est = -1 }",
        "objective[2], `mode.like`: expected the name of a body or component, found 'est'; did you mean \"west\"?",
    ),
    (
        "mode of a platform",
        "like = { east = 1, west = -1 }",
        "like = { east = 1, stage = -1 }",
        'objective[2], `mode.like`: expected one of its components, "stage.z", "stage.ry", found the body \'stage\'',
    ),
    (
        "mode of a fixed joint",
        "like = { east = 1, west = -1 }",
        "like = { east = 1, foot = -1 }",
        "objective[2], `mode.like`: expected a body that can move, found 'foot', which is fixed",
    ),
    (
        "mode of a component without quotes",
        "like = { east = 1, west = -1 }",
        "like = { east = 1, stage.z = -1 }",
        "objective[2], `mode`: expected a table of two or more bodies or components, such as { "
        "east = 1, west = -1 }, found a table at 'stage'; a component is written in quotes, "
        '"stage.ry" = 1',
    ),
    (
        "mode of the same component twice",
        "like = { east = 1, west = -1 }",
        'like = { east = 1, "east.x" = -1 }',
        "objective[2], `mode.like`: expected each component once, found 'east.x' again",
    ),
    (
        "one of two modes",
        "modes = [1, 2]",
        "modes = [1]",
        "objective[4], `modes`: expected an array of 2 modes, found an array of 1",
    ),
    (
        "same mode twice",
        "modes = [1, 2]",
        "modes = [1, 1]",
        "objective[4], `modes`: expected two modes, each once, found 1 twice",
    ),
    (
        "modes descending",
        "modes = [1, 2]",
        "modes = [2, 1]",
        "objective[4], `modes`: expected [1, 2], the lower mode first, found [2, 1]",
    ),
    (
        "band and orders",
        'band = ["13.5 Hz", "16.5 Hz"]',
        'band = ["13.5 Hz", "16.5 Hz"]\norders = [1]',
        "objective[7], `band`: expected `band`, or `orders` with `speed`, found both",
    ),
    (
        "neither band nor orders",
        'band = ["13.5 Hz", "16.5 Hz"]\n',
        "",
        "objective[7]: expected `band`, or `orders` with `speed`, found neither",
    ),
    (
        "orders without speed",
        'orders = [1, 2]\nspeed = ["1420 rpm", "1500 rpm"]\nmargin',
        "orders = [1, 2]\nmargin",
        'objective[8], `speed`: expected a range of speeds beside `orders`, such as ["1420 rpm", '
        '"1500 rpm"], found none',
    ),
    (
        "band reversed",
        'band = ["13.5 Hz", "16.5 Hz"]',
        'band = ["16.5 Hz", "13.5 Hz"]',
        "objective[7], `band`: expected [lowest, highest], two of a frequency, found ['16.5 Hz', "
        "'13.5 Hz']; the lower end stands first",
    ),
    (
        "margin of all",
        'margin = "5 %"',
        'margin = "100 %"',
        "objective[7], `margin`: expected less than 100 % of the edges, found 100 %",
    ),
    (
        "driven by nothing",
        'driven_by = "bench"',
        'driven_by = "bunch"',
        "objective[7], `driven_by`: expected the name of a body or component, found 'bunch'; did you mean \"bench\"?",
    ),
    (
        "released from a platform",
        'from = "stage.z"',
        'from = "stage"',
        'objective[10], `from`: expected one of its components, "stage.z", "stage.ry", found the body \'stage\'',
    ),
    (
        "handed to itself",
        'from = "east"',
        'from = "west"',
        "objective[9], `to`: expected another body than `from`, found 'west'",
    ),
    (
        "completeness above one",
        'completeness = "90 %"',
        "completeness = 1.2",
        'objective[9], `completeness`: expected a pure number up to 1, found 1.2; a share is a number, 0.95, or "95 %"',
    ),
    (
        "node along an axis it has not",
        'body = "motor"\naxis = "r"',
        'body = "motor"\naxis = "x"',
        "objective[14], `axis`: expected an axis on which 'motor' moves (r), found 'x'",
    ),
    (
        "node of what only turns",
        'body = "motor"\naxis = "r"',
        'body = "motor"',
        'objective[14], `axis`: expected the axis of a body that only turns, found none; such as axis = "r"',
    ),
    (
        "share of an unknown body",
        'body = "bench"\naxis = "z"',
        'body = "banch"\naxis = "z"',
        "objective[15], `body`: expected the name of a body, found 'banch'; did you mean \"bench\"?",
    ),
    (
        "sag of both",
        'body = "deck"\nat_most = "14 mm"',
        'body = "deck"\nlink = "feet"\nat_most = "14 mm"',
        "objective[16]: expected either `body` or `link`, found both",
    ),
    (
        "sag of a pendulum",
        'body = "deck"\nat_most = "14 mm"',
        'body = "east"\nat_most = "14 mm"',
        "objective[16], `body`: expected a body that moves along z, found 'east' with x; a force "
        "may act along another `axis`",
    ),
    (
        "sag along x",
        'body = "deck"\nat_most = "14 mm"',
        'body = "tip"\naxis = "x"\nat_most = "14 mm"',
        "objective[16], `axis`: expected \"z\" for the deflection under the own weight, found 'x'",
    ),
    (
        "sag of a damper",
        'link = "rise"',
        'link = "dashpot"',
        "objective[18], `link`: expected a spring, mount or rod, found a damper",
    ),
    (
        "sag of an unknown link",
        'link = "rise"',
        'link = "rice"',
        "objective[18], `link`: expected the name of a link, found 'rice'; did you mean \"rise\"?",
    ),
    (
        "force on a link",
        'link = "rise"',
        'link = "rise"\nforce = "1 N"',
        "objective[18], `force`: expected `force` beside `body` only, found `link`; name the "
        "body that the force acts on",
    ),
    (
        "cost of what has no price",
        'parts = ["w*"]',
        'parts = ["deck"]',
        "objective[20], `parts`: expected a pattern that matches a part, found 'deck'; there is west, wall, tie",
    ),
    (
        "change without starts",
        "range = [0.5, 1.5]\nstart = 1",
        "range = [0.5, 1.5]",
        "objective[21]: expected a `start` for every free variable, found none for `share`",
    ),
    (
        "unknown condition",
        "weight = 2",
        'conditions = ["hot"]',
        "objective[1], `conditions`: expected the name of a [[condition]], found 'hot'; there is none",
    ),
    # shop, site and budget
    (
        "pattern that matches nothing",
        'on = ["tie.coil"]',
        'on = ["tie.coils"]',
        "tolerance[3], `on`: expected a pattern that matches a dimension, found 'tie.coils'; did "
        'you mean "tie.coil"?',
    ),
    (
        "pattern without brackets",
        'on = ["tie.coil"]',
        'on = "tie.coil"',
        "tolerance[3], `on`: expected an array of one or more patterns, such as [\"*.length\"], found 'tie.coil'",
    ),
    (
        "two tolerances",
        'on = ["tie.coil"]',
        'on = ["tie.coil", "east.length"]',
        "tolerance[3], `on`: expected dimensions of no other table, found `east.length` in tolerance[1] already",
    ),
    (
        "tolerance in another unit",
        'each = "1 mm"',
        'each = "1 N"',
        'tolerance[1], `each`: expected the window of a length, such as "20 mm", or a share of '
        "it, \"2 %\", found '1 N', a force in N; `low west.length` is in m",
    ),
    (
        "negative tolerance",
        'each = "1 mm"',
        'each = "-1 mm"',
        'tolerance[1], `each`: expected the window of a length, such as "20 mm", or a share of '
        "it, \"2 %\", found '-1 mm'; it holds on both sides and has no sign",
    ),
    (
        "tolerance as large as the part",
        'each = "1 mm"',
        'each = "400 mm"',
        "tolerance[1]: expected a tolerance smaller than `low west.length` itself, found 0.4 of 0.4 m",
    ),
    (
        "tolerance of all",
        'each = "4 %"',
        'each = "97 %"',
        "tolerance[2]: expected a tolerance smaller than `tie.rate` itself, found 79300 of 79300 N/m",
    ),
    (
        "no tolerance",
        'each = "1 mm"\n',
        "",
        "tolerance[1]: expected `each` or `batch`, or both, found neither",
    ),
    (
        "class of a rate",
        'each = "4 %"',
        'each = "class m"',
        "tolerance[2], `each`: expected lengths only with a published class, found `tie.rate` in N/m",
    ),
    (
        "unknown class",
        'each = "class m"',
        'each = "class x"',
        'tolerance[4], `each`: expected "class f", "class m", "class c" or "class v" (ISO 2768-1), found \'class x\'',
    ),
    (
        "unknown grade",
        'each = "IT8"',
        'each = "IT19"',
        'tolerance[3], `each`: expected a grade from "IT01" to "IT18" (ISO 286-1), found \'IT19\'',
    ),
    (
        "unknown distribution",
        'distribution = "uniform"',
        'distribution = "gaussian"',
        'tolerance[2], `distribution`: expected one of "normal", "uniform", "triangular", found \'gaussian\'',
    ),
    (
        "load twice",
        'name = "push"',
        'name = "drive"',
        "load[2], `name`: expected a name of its own, found 'drive' again",
    ),
    (
        "load on nothing",
        'body = "deck"\namplitude',
        'body = "dock"\namplitude',
        'load "drive", `body`: expected the name of a body or component, found \'dock\'; did you mean "deck"?',
    ),
    (
        "load of a wrong unit",
        'amplitude = "50 g mm"',
        'amplitude = "50 N"',
        'load "drive", `amplitude`: expected an unbalance, such as "50 g mm", found \'50 N\', a force in N',
    ),
    (
        "force on a rotation",
        'amplitude = "3 N m"',
        'amplitude = "3 N"',
        'load "push", `amplitude`: expected a moment, such as "12 N m", found \'3 N\', a force in N',
    ),
    (
        "load without body",
        'body = "deck"\namplitude',
        "amplitude",
        'load "drive", `body`: expected the body on which it acts, found none',
    ),
    (
        "base with a body",
        'kind = "base acceleration"',
        'kind = "base acceleration"\nbody = "deck"',
        'load "floor", `body`: expected no body with a base acceleration, found one; it moves the ground',
    ),
    (
        "base without axis",
        'kind = "base acceleration"\naxis = "z"',
        'kind = "base acceleration"',
        'load "floor", `axis`: expected "x", "y" or "z" for a moving base, found \'none\'',
    ),
    (
        "orders of a load without speed",
        'orders = [1]\nspeed = ["1420 rpm", "1500 rpm"]',
        "orders = [1]",
        'load "drive", `speed`: expected `orders` and `speed` together, found no `speed`',
    ),
    (
        "condition without change",
        "[solve]",
        '[[condition]]\nname = "hot"\n[solve]',
        'condition "hot": expected `set`, `factor`, `shift` or `temperature`, found none of them',
    ),
    (
        "condition on nothing",
        "[solve]",
        '[[condition]]\nname = "hot"\nset = { "*.rat" = "1 N/m" }\n[solve]',
        "condition \"hot\", `set`: expected a pattern that matches a dimension, found '*.rat'; did "
        'you mean "tie.rate"?',
    ),
    (
        "condition in another unit",
        "[solve]",
        '[[condition]]\nname = "hot"\nshift = { "east.length" = "1 s" }\n[solve]',
        'condition "hot", `shift.east.length`: expected a length, such as "20 mm", found \'1 s\', a time in s',
    ),
    (
        "condition twice",
        "[solve]",
        '[[condition]]\nname = "hot"\nfactor = { "*.rate" = 0.9 }\n[[condition]]\nname = '
        '"hot"\ntemperature = "60 degC"\n[solve]',
        "condition[2], `name`: expected a name of its own, found 'hot' again",
    ),
    (
        "price twice",
        'on = ["tie"]',
        'on = ["tie", "wall"]',
        "cost[2], `on`: expected parts without a price, found 'wall', which has one already",
    ),
    (
        "price and price per",
        "price = 12.5",
        'price = 12.5\nprice_per = "3 * mass"',
        "cost[1], `price`: expected either `price` or `price_per`, found both",
    ),
    (
        "price of nothing",
        "price = 12.5\n",
        "",
        "cost[1]: expected `price`, `price_per` or `tolerance_price`, found none of them",
    ),
    (
        "price of a dimension the part has not",
        'price_per = "4 * wire^2"',
        'price_per = "4 * wier^2"',
        "the price of `tie` names `wier`; its dimensions are at.east, at.west, coil, mass, rate, steel, turns, wire",
    ),
    (
        "price that rises with the tolerance",
        "0.002 / tolerance",
        "0.002 * tolerance",
        'cost[3], `tolerance_price`: expected a falling product of `tolerance`, as "0.002 / '
        'tolerance", found 0.002 * tolerance',
    ),
    (
        "price per what may be zero",
        'on = ["tie"]\nprice_per = "4 * wire^2"',
        'on = ["mount c"]\nprice_per = "4 / at"',
        "the price of `mount c` names `at`; its dimensions are at.x, at.y, at.z, force, rates.axial, rates.lateral",
    ),
    (
        "adjustment in another unit",
        '["1.9 m", "2.1 m"]\nstep = "0.5 mm"',
        '["1.9 N", "2.1 N"]',
        "adjust[1], `range`: expected m for `east.length`, found a range in N",
    ),
    (
        "step beyond the range",
        'step = "0.5 mm"',
        'step = "500 mm"',
        "adjust[1], `step`: expected a step above zero and within the range, found 0.5",
    ),
    (
        "unknown direction",
        'direction = "up"',
        'direction = "upward"',
        'adjust[1], `direction`: expected one of "both", "up", "down", found \'upward\'',
    ),
    # solving
    (
        "unknown route",
        'route = "gradient"',
        'route = "newton"',
        'solve, `route`: expected one of "auto", "gradient", "convex", "search", "reconstruct", found \'newton\'',
    ),
    (
        "seed below zero",
        "seed = 7",
        "seed = -7",
        "solve, `seed`: expected a seed, a whole number from 0 to 9223372036854775807, found -7",
    ),
    (
        "no starts",
        "starts = 12",
        "starts = 0",
        "solve, `starts`: expected a number of starts, a whole number from 1 to 100000, found 0",
    ),
    (
        "starts as text",
        "starts = 12",
        'starts = "12"',
        "solve, `starts`: expected a number of starts, a whole number from 1 to 100000, found '12'",
    ),
    # what is not judged yet
    (
        "kind that is not judged yet",
        "[[tolerance]]",
        '[[objective]]\nkind = "decay time"\nmode = 1\nat_most = "3 s"\n[[tolerance]]',
        "objective[22], `kind`: this version does not judge 'decay time' yet",
    ),
    (
        "response that is not judged yet",
        "[[tolerance]]",
        '[[objective]]\nkind = "response"\nbody = "deck"\nload = "drive"\nat_frequency = "24 '
        'Hz"\nat_most = "1 mm"\n[[tolerance]]',
        "objective[22], `kind`: this version does not judge 'response' yet",
    ),
    (
        "response to an unknown load",
        "[[tolerance]]",
        '[[objective]]\nkind = "response"\nbody = "deck"\nload = "drove"\nat_frequency = "24 '
        'Hz"\nat_most = "1 mm"\n[[tolerance]]',
        "objective[22], `load`: expected the name of a [[load]], found 'drove'; did you mean \"drive\"?",
    ),
    (
        "response in another unit",
        "[[tolerance]]",
        '[[objective]]\nkind = "peak response"\nbody = "deck"\nload = "drive"\nquantity = '
        '"velocity"\nband = ["1 Hz", "9 Hz"]\nat_most = "1 mm"\n[[tolerance]]',
        "objective[22], `at_most`: expected a velocity, such as \"5 mm/s\", found '1 mm', a length in m",
    ),
    (
        "condition that is not judged yet",
        "[solve]",
        '[[condition]]\nname = "hot"\nfactor = { "*.rate" = 0.9 }\n[solve]',
        'condition "hot": this version does not judge conditions yet',
    ),
]


@pytest.mark.parametrize(("old", "new", "message"), [row[1:] for row in RULES], ids=[row[0] for row in RULES])
def test_a_broken_rule_is_named(everything, folder, old, new, message):
    assert old in everything
    with pytest.raises(StudyError) as failure:
        parse_study(everything.replace(old, new, 1), folder, "study")
    pattern = ".*".join(re.escape(part) for part in f"study: {message}".split("…"))
    assert any(re.fullmatch(pattern, line) for line in str(failure.value).splitlines()), failure.value


def refused(text, folder, name="study"):
    with pytest.raises(StudyError) as failure:
        parse_study(text, folder, name)
    return str(failure.value)


def test_the_path_is_in_front_of_the_message(tmp_path):
    path = tmp_path / "pair.toml"
    path.write_text("title = 3\n", "utf-8")
    with pytest.raises(StudyError) as failure:
        read_study(path)
    assert str(failure.value) == f"{path}: `title`: expected a text, found 3"


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b'title = "caf\xe9"\n', "found bytes that are none, at line 1; save the file with the encoding UTF-8"),
        (b"a = 1\n" * 900_000, "found 5.4 MB; 5 MB are the limit"),
        (b"a = " + b"[" * 100_000, "this is no TOML: brackets nested beyond all use"),
        (b"a = " + b"9" * 5_000, "this is no TOML: a number with too many digits"),
        (b"a = 1\na = 2\n", "(at line 2, column 6)"),
        (b"a = 2026-02-30\n", "this is no TOML: Invalid date or datetime (at line 1, column 5)"),
        (b"a = 0x" + b"f" * 100_000, "expected a key that is known here, found 'a'"),
        (b"seed = 0x" + b"f" * 100_000 + b"\n", "expected a key that is known here, found 'seed'"),
        (b"title = 0x" + b"f" * 5_000 + b"\n", "expected a text, found a huge number"),
        (".".join("a" * 3_000).encode() + b" = 1\n", "expected a key that is known here, found 'a'"),
        (b'"\\u001b[31m" = 1\n', r"found '\x1b[31m'"),
    ],
    ids=["latin", "huge", "nested", "digits", "twice", "no day", "hexadecimal", "seed", "title", "dotted", "control"],
)
def test_a_file_that_is_something_else_is_refused(tmp_path, content, message):
    path = tmp_path / "study.toml"
    path.write_bytes(content)
    with pytest.raises(StudyError) as failure:
        read_study(path)
    assert message in str(failure.value)


def test_a_mark_of_byte_order_is_accepted(tmp_path):
    """Common practice of some editors, no source; TOML 1.0 itself has none."""
    path = tmp_path / "study.toml"
    path.write_bytes(b"\xef\xbb\xbftitle = 'ok'\n")
    assert read_study(path).title == "ok"


def test_a_missing_file_and_a_folder_are_refused(tmp_path):
    for path, message in (
        (tmp_path / "none.toml", "found no such file"),
        (tmp_path / "a\0b", "found no such file"),
        (tmp_path / ("a" * 5000), "found a file that cannot be read; File name too long"),
        (tmp_path, "found a folder"),
    ):
        with pytest.raises(StudyError, match=message):
            read_study(path)


def test_at_most_ten_problems_are_reported_one_a_line(folder):
    text = "".join(f'[[body]]\nname = "b{i}"\nkind = "mass"\nmass = 1\n' for i in range(50))
    lines = refused(text, folder).splitlines()
    assert len(lines) == 10
    assert all(line.startswith(f'study: body "b{i}", `mass`: expected a mass') for i, line in enumerate(lines))


def test_parts_that_do_not_fit_together_are_an_error_of_the_study(folder):
    """What the assembly refuses comes with the name of the file."""
    deck = '[[body]]\nname = "deck"\nkind = "mass"\nmoves = "vertical"\nmass = "65 kg"\n'
    sag = '[[objective]]\nkind = "sag"\nbody = "deck"\nat_most = "1 mm"\n'
    assert refused(deck + sag, folder).startswith("study: nothing carries the load on `deck.z`")
    block = '[[body]]\nname = "block"\nkind = "mass"\nmass = "6 kg"\n'
    link = '[[link]]\nname = "odd"\nkind = "spring"\nbetween = ["deck", "block"]\nrate = "1 N/m"\n'
    assert "link `odd` leaves `block` without first-order coupling" in refused(deck + block + link, folder)


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        (
            "",
            "expected the columns part, value, unit and perhaps tolerance, mass, price, quantity, found no column part",
        ),
        ("part;value;unit\n", "found the column 'part;value;unit'; columns are parted by commas"),
        ("part,value,units\na,1,N/m\n", "found the column 'units'; did you mean \"unit\"?"),
        ("part,value,unit,unit\n", "found a column twice"),
        ("part,value,unit\n", "expected a stock list with at least one part, found none"),
        ("part,value,unit\na,1,N/m\na,2,N/m\n", "expected each part once, found 'a' again at line 3"),
        ("part,value,unit\na,1,N/m\nb,2,mm\n", "expected values of one kind, found m after N/m at line 3"),
        ("part,value,unit\na,0,N/m\n", "expected a value greater than zero at line 2, found '0'"),
        ("part,value,unit\na,1;5,N/m\n", "at line 2, found '1;5 N/m'"),
        ("part,value,unit\na,1,5,N/m\n", "expected 3 columns at line 2, found 4; decimals are written with a point"),
        ("part,value,unit\n,1,N/m\n", "expected a part number at line 2, found none"),
        ("part,value,unit,price\na,1,N/m,-3\n", "expected a price of zero or more"),
        ("part,value,unit,quantity\na,1,N/m,1.5\n", "expected how many are in stock, a whole number at line 2"),
        ("part,value,unit,tolerance\na,1,N/m,1 mm\n", "expected the window of a rate"),
        ('part,value,unit\n"a,1,N/m\n', "expected a stock list in CSV, found unexpected end of data at line 2"),
    ],
)
def test_a_line_of_a_stock_list_at_fault_is_named(tmp_path, lines, message):
    (tmp_path / "list.csv").write_text(lines, "utf-8")
    found = refused('[stock.all]\nfile = "list.csv"\n', tmp_path)
    assert found.startswith("study: stock.all, list.csv: ")
    assert message in found


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        (
            "%%MatrixMarket matrix array real general\n2 2\n1\n2\n3\n4\n",
            "expected a matrix that is symmetric to rounding",
        ),
        ("%%MatrixMarket matrix array real general\n2 2\n1\n2\n2\nnan\n", "found numbers that are not finite"),
        ("%%MatrixMarket matrix array complex general\n2 2\n1 0\n0 0\n0 0\n1 0\n", "found one of complex numbers"),
        ("%%MatrixMarket matrix coordinate pattern general\n2 2 1\n1 1\n", "found one of pattern numbers"),
        ("%%MatrixMarket matrix array real general\n2 2\n1\n2\n", "found a file that cannot be read as one"),
        ("%%MatrixMarket matrix coordinate real general\n2 2 1\n9 9 1\n", "found a file that cannot be read as one"),
        ("%%MatrixMarket matrix coordinate real general\n2 2 99\n1 1 1\n", "found 99 entries"),
        ("", "found a file that cannot be read as one"),
    ],
)
def test_a_matrix_at_fault_is_refused(tmp_path, lines, message):
    (tmp_path / "m.mtx").write_text(lines, "utf-8")
    found = refused('[[matrix]]\nlabels = ["a", "b"]\nmass = "m.mtx"\n', tmp_path)
    assert found.startswith("study: matrix[1], `mass`: ")
    assert message in found
