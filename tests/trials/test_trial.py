"""One trial: what may be left out, and what may not change."""

from dataclasses import FrozenInstanceError

import numpy as np
import pytest

from habitat.trials.trial import Trial


def bare(name):
    """Give a trial of which a file says only what it must."""
    return Trial(name, name, 10.0, np.array([8.0, 1.0]), np.array([2.0, 1.0]))


def test_what_a_file_need_not_say_is_none_rather_than_a_number():
    trial = bare("a")
    assert (trial.mass, trial.salinity, trial.time) == (None, None, None)


def test_exclusions_of_one_trial_are_not_counted_for_another():
    first, second = bare("a"), bare("b")
    first.excluded["no rate"] = 3
    assert second.excluded == {}


def test_a_trial_is_not_changed_after_it_was_read():
    with pytest.raises(FrozenInstanceError, match="temperature"):
        bare("a").temperature = 12.0
