"""Commented configs to start from, one for each line of work."""

from __future__ import annotations

from sweep.errors import QuestionError

STARTERS = {
    "axis": "a servo axis with a structural resonance under proportional and derivative control",
    "converter": "a converter's LC output filter under proportional control",
    "process": "a process with one lag and dead time under proportional and integral control",
}
"""Name and purpose of every starter."""

_AXIS = """\
# A servo axis whose structure rings. Put your own numbers in.
title = "Turntable with a flexible column"

[plant]
kind = "oscillator"              # gain * wn^2 / (s^2 + 2 damping wn s + wn^2)
natural_frequency = "32 Hz"
output_unit = "mrad"             # labels only: the gains then read V/mrad
input_unit = "V"

[controller]
kind = "pd"                      # p, pi, pd or pid; a positive kp is negative feedback

[delay]                          # from the sampling instant to the new output, as parts that add up
conversion = "40 us"             # The hold's own half sample is in the model already: do not enter
update = "1 sample"              # it. What the trade calls 1.5 samples is 1 sample here.

[axes.sample_period]             # design axes: what you choose
values = ["1 ms", "2 ms", "4 ms", "8 ms", "16 ms"]

[axes.kp]
start = -1.0
stop = 1.0
step = 0.01

[axes.kd]
values = ["0 ms", "1 ms", "2 ms", "3 ms", "4 ms"]

[axes.damping]                   # a tolerance axis: what nature chooses
values = [0.005, 0.01, 0.02]

[designs.first_guess]            # one value for every design axis
sample_period = "2 ms"
kp = 0.1
kd = "2 ms"

[cases.normal]                   # what must hold for every damping in the range
over.damping = [0.005, 0.02]
require.max_decay_time = "300 ms"
"""

_CONVERTER = """\
# An LC output filter behind a switching stage. Put your own numbers in.
title = "Output filter of a bench supply"

[plant]
kind = "oscillator"              # the filter: gain * wn^2 / (s^2 + 2 damping wn s + wn^2)
natural_frequency = "1.8 kHz"    # 1 / (2 pi sqrt(L C))

[controller]
kind = "pi"                      # on the output voltage; kp and ki may be negative
integral = "backward"            # or "forward", "trapezoidal"

[delay]                          # from the sampling instant to the new duty cycle
update = "1 sample"              # The modulator's own half sample is in the model already (the
                                 # hold): what the trade calls 1.5 samples is 1 sample here.

[axes.sample_rate]               # in Hz; stored as the sample period
values = ["20 kHz", "24 kHz", "30 kHz", "40 kHz"]

[axes.kp]
start = -1.0
stop = 1.0
step = 0.0125

[axes.ki]
start = 0
stop = 2000
step = 20

[axes.damping]
values = [0.02, 0.05, 0.1]       # from no load to full load

[designs.first_guess]
sample_rate = "40 kHz"
kp = -0.1
ki = 600

[cases.any_load]
require.max_decay_time = "10 ms" # over every damping of the axis
"""

_PROCESS = """\
# A process with one lag and dead time. Put your own numbers in.
title = "Outlet temperature of a small heater"

[plant]
kind = "lag"                     # gain / (time_constant s + 1)
time_constant = "40 s"

[controller]
kind = "pi"                      # kp + ki / s

[delay]                          # from the sampling instant until the output acts, as parts
conversion = "100 ms"            # The hold's own half sample is in the model already: enter dead
                                 # time and update times only, not an extra half sample.

[axes.sample_period]
values = ["1 s", "2 s", "5 s", "10 s"]

[axes.kp]
start = 0
stop = 6
step = 0.05

[axes.ki]
start = 0
stop = 0.3
count = 61

[axes.dead_time]                 # a free name; `sets` says which parameter it sweeps
sets = "delay.transport"
values = ["6 s", "9 s", "12 s"]

[designs.first_guess]
sample_period = "2 s"
kp = 1.5
ki = 0.03

[cases.any_flow]
require.max_decay_time = "60 s"  # over every dead time of the axis
"""

_TEXTS = {"axis": _AXIS, "converter": _CONVERTER, "process": _PROCESS}


def starter_text(name: str) -> str:
    """Get the text of a starter config.

    Parameters
    ----------
    name
        A key of `STARTERS`.

    Raises
    ------
    QuestionError
        When there is no such starter.
    """
    if name not in _TEXTS:
        raise QuestionError(
            f"there is no starter config called {name!r}; expected one of {', '.join(STARTERS)}",
            where=[name],
            remedy=f"choose {' or '.join(STARTERS)}",
        )
    return _TEXTS[name]
