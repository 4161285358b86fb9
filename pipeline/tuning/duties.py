"""What is usually asked of a loop, by its duty: the defaults where nobody asks for anything else."""

from __future__ import annotations

from pipeline.tuning.types import Criteria

#: Common practice throughout, no single source: ranges that practitioners name, and the value taken.
#: A criterion that is left out stands as in `Criteria`. They are the user's to change, no standard's.
USUAL: dict[str, Criteria] = {
    # noise and a valve with play, often the inner loop of a cascade: phase margin 60 to 75, Ms 1.2 to 1.5
    "flow": Criteria(phase_margin=65.0, gain_margin=3.0, max_sensitivity=1.5),
    # phase margin 50 to 65, Ms 1.4 to 1.7
    "pressure": Criteria(phase_margin=60.0, max_sensitivity=1.7),
    # phase margin 45 to 55, Ms 1.5 to 1.8; held against loads, its set point hardly moves: no overshoot asked
    "level": Criteria(phase_margin=50.0, max_sensitivity=1.7, overshoot=None, percentile_phase_margin=37.5),
    # phase margin 55 to 65, Ms 1.4 to 1.7
    "temperature": Criteria(phase_margin=60.0, max_sensitivity=1.7),
    # gain margin 3 at least, Ms 1.5 at most
    "composition": Criteria(phase_margin=60.0, gain_margin=3.0, max_sensitivity=1.5),
    # phase margin 45 to 60, gain margin 8 to 10 dB
    "speed": Criteria(phase_margin=60.0, gain_margin=3.0),
    # phase margin 65 to 75, no overshoot
    "position": Criteria(phase_margin=70.0, overshoot=1.0, percentile_phase_margin=52.5),
    "other": Criteria(),
}
