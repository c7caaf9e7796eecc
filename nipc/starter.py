"""A commented study and a small propagator that run as they are: what one starts from."""

from __future__ import annotations

import json
from enum import StrEnum
from pathlib import Path

from nipc.errors import InputError

STUDY = """\
#:schema study.schema.json
# A study of nipc. Everything here is invented: change it into your own.
title = "Oscillator under a noisy force"
seed = 1                       # the same study gives the same numbers
tolerance = 0.02               # how far held-out direct runs may differ, over the spread

[propagator]                   # the black box
{propagator}
[clock]
end = 6.0
unit = "s"
outputs = 31                   # how many evenly spaced times, or a list of them
period = 6.283                 # a characteristic period: tells how many noise terms are needed

[[state]]                      # one table a state component, in the propagator's order
name = "x"
unit = "m"
mean = 0.1
std = 0.01                     # standard deviation of the start

[[state]]
name = "v"
unit = "m/s"
mean = 0.0
std = 0.0                      # known exactly

[[parameter]]                  # also fixed, truncated-normal, lognormal, triangular, beta, normal
name = "stiffness"
unit = "1/s^2"
law = "uniform"
lower = 0.98
upper = 1.02

[[noise]]                      # white: a velocity driven by it has variance intensity^2 t
name = "force"
unit = "m/s^1.5"
intensity = 0.005

[[quantity]]                   # what you want to know
name = "x"
unit = "m"
box = [-0.15, 0.15]            # what it should stay in

[[quantity]]
name = "energy"
unit = "m^2/s^2"
expression = "0.5 * v**2 + 0.5 * stiffness * x**2"
"""

FUNCTION = '''\
"""The propagator: replace the integration by a call of your own code."""

import numpy as np
from scipy.integrate import solve_ivp


def propagate(x0, times, forcing, parameters):
    """States (len(times), 2) from x0 at times[0]; forcing(t) holds one value a noise source."""

    def rates(t, x):
        return [x[1], -parameters[0] * x[0] + forcing(t)[0]]

    span = (times[0], times[-1])
    return solve_ivp(rates, span, x0, t_eval=times, rtol=1e-8, atol=1e-10).y.T
'''

ODE = '''\
"""The right-hand side: replace it by your own equations of motion."""


def rates(t, x, xi, parameters):
    """dx/dt of the state x under the noise xi, one value a source."""
    return [x[1], -parameters[0] * x[0] + xi[0]]
'''

PROGRAM = '''\
#!/usr/bin/env python3
"""A program that knows nothing of nipc: reads motion.in and forcing.dat, writes motion.out."""

with open("motion.in") as file:
    x, v, stiffness, *times = (float(word) for word in file.read().split())
with open("forcing.dat") as file:
    table = [tuple(map(float, line.split())) for line in file]  # time, force
step = table[1][0] - table[0][0]
with open("motion.out", "w") as out:
    for (t, a), (_, b) in zip(table, table[1:] + table[-1:]):
        if times and t > times[0] - step / 2:
            print(times.pop(0), x, v, file=out)
        v += 0.5 * step * (a - stiffness * x)  # leapfrog
        x += step * v
        v += 0.5 * step * (b - stiffness * x)
'''

DECK = "$x $v $stiffness\n$times\n"

PROGRAM_SETTINGS = """\
adapter = "executable"
command = ["motion.py"]        # the program and its arguments; beside this file, or on the path

[[propagator.inputs]]          # each run has a folder of its own; this is written into it
file = "motion.in"
template = "motion.in"         # $x, $v, $stiffness, $times and others are filled in

[propagator.forcing]           # a table: time, then one value a noise source
file = "forcing.dat"
step = 0.02                    # the program's own step

[propagator.output]            # a row an output time, the start first
file = "motion.out"
time_column = 1
columns = [2, 3]               # x and v
"""


class Flavour(StrEnum):
    """What the propagator is."""

    FUNCTION = "function"
    ODE = "ode"
    EXECUTABLE = "executable"


# the [propagator] table, and the files beside the study
FLAVOURS = {
    Flavour.FUNCTION: (
        'adapter = "function"\nfunction = "motion:propagate"  # in motion.py beside this file\n',
        {"motion.py": FUNCTION},
    ),
    Flavour.ODE: (
        'adapter = "ode"\nrhs = "motion:rates"           # in motion.py beside this file\n',
        {"motion.py": ODE},
    ),
    Flavour.EXECUTABLE: (PROGRAM_SETTINGS, {"motion.py": PROGRAM, "motion.in": DECK}),
}


def write_starter(folder: Path, flavour: Flavour) -> Path:
    """Write study.toml and what it names to a new folder; the study file's path.

    InputError when something is there already, or nothing can be written.
    """
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise InputError(f"{folder} is there already and not empty; name a new folder")
    from nipc.study_schema import study_schema

    settings, files = FLAVOURS[flavour]
    # what editors complete the study from
    files = files | {"study.schema.json": json.dumps(study_schema(), indent=2) + "\n"}
    study = folder / "study.toml"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, text in files.items():
            (folder / name).write_text(text, encoding="utf-8")
            if text.startswith("#!"):
                (folder / name).chmod(0o755)
        study.write_text(STUDY.format(propagator=settings), encoding="utf-8")
    except OSError as error:
        raise InputError(f"cannot write to {folder}: {error.strerror}") from None
    return study
