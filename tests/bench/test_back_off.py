"""The back-off keeps its percentile on plausible processes it has not seen.

Run with: pytest tests/bench/test_back_off.py -m bench -s
"""

import numpy as np
import pytest
from logs import bump_log, log_data
from plants import ROWS, published

from fitters.choose import choose
from fitters.spread import Floor, plausible
from pipeline.loop.forms import Entry
from pipeline.loop.margins import batch_margins
from pipeline.tuning.recommend import PLAUSIBLE
from pipeline.tuning.tuner import least_dead_time, raised, tune
from pipeline.tuning.types import Criteria
from pipeline.tuning.uncertainty import back_off

pytestmark = pytest.mark.bench

PLANTS = 40
#: Noise that makes a back-off needed on most of them [share of the PV's move].
NOISE = 0.1
#: Uncertainty held for possible whatever the log says: so that every plant needs a back-off.
FLOOR = Floor(gain=0.2, lags=0.2, dead_time=0.3)
FRESH = 4096


@pytest.mark.parametrize("source", ["noise in the log", "stated floor"])
def test_the_criterion_is_kept_in_94_to_97_percent_of_fresh_plausible_plants(source):
    """5 % may fall short of 45 degrees: drawn anew, 94 to 97 % keep it wherever the back-off binds."""
    kept, factors = [], []
    for seed, (name, _, process, span) in enumerate(published()):
        if len(kept) == PLANTS:
            break
        t, co, pv = bump_log(process, span=span, rows=ROWS, noise=NOISE, seed=500 + seed)
        choice = choose(log_data(t, co, pv))
        late = 0.5 * float(t[1] - t[0])
        tuning = tune(choice.best.model, kind="PI", criteria=Criteria(), dead_time_floor=late)

        def drawn(count, start, choice=choice, late=late):
            models = plausible(choice, FLOOR, count, start)[source]
            return [raised(m, least_dead_time(choice.best.model, "PI", late)) for m in models]

        made = back_off(tuning, {source: drawn(PLAUSIBLE, 1)}, Criteria(), Entry())[0]
        if made.factor == 1.0 or not made.held:
            continue
        table = batch_margins(drawn(FRESH, 9_000 + seed), made.controller)
        kept.append(100.0 * np.mean(table.phase_margin >= 45.0))
        factors.append(made.factor)
        if not 94.0 <= kept[-1] <= 97.0:
            print(f"  {name} ({choice.best.structure}): {kept[-1]:.1f} % at {made.factor:.2f}")
    print(
        f"\n{source}: {len(kept)} plants backed off to {min(factors):.2f} to {max(factors):.2f}; "
        f"kept {min(kept):.1f} to {max(kept):.1f} %"
    )
    assert min(kept) >= 94.0 and max(kept) <= 97.0
    assert len(kept) >= (PLANTS if source == "stated floor" else 10)
