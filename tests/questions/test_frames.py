"""Whether the tables for notebooks hold what the questions answer."""

from __future__ import annotations

import numpy as np
import pandas as pd

from registry.questions.frames import events_frame, parameters_frame, states_frame

from .conftest import Lab, day


def test_states_come_oldest_first_with_a_column_a_gate_in_volts(lab: Lab) -> None:
    first = lab.good(1, volts={"P1": 0.5})
    second = lab.state(2, {"P1": 2.0, "B1": 1.0}, level="source")
    frame = states_frame(lab.registry, lab.device)
    assert list(frame.index) == [first, second]
    np.testing.assert_array_equal(frame["volts.P1"], [0.5, 0.4])
    np.testing.assert_array_equal(frame["volts.B1"], [np.nan, 0.2])
    assert frame.attrs["units"]["volts.P1"] == "V"
    assert frame["at"].iloc[0] == pd.Timestamp(day(1), unit="us", tz="UTC")


def test_values_carry_their_units(lab: Lab) -> None:
    tuning = lab.state(1)
    lab.value(tuning, 1.1)
    lab.value(tuning, 1.2, "lever_arm", value=0.1, u=None)
    frame = parameters_frame(lab.registry, lab.device)
    assert frame.attrs["units"] == {"electron_temperature": "K", "lever_arm": "eV/V"}
    np.testing.assert_array_equal(frame["standard_uncertainty"], [0.002, np.nan])


def test_events_tell_their_effect(lab: Lab) -> None:
    lab.event("cycled", 1, kelvin=60.0, until=day(1.5))
    lab.event("note", 2, note="new helium")
    frame = events_frame(lab.registry, lab.device)
    assert list(frame["effect"]) == ["partly-resets", "informs"]
    assert frame["until"].isna().tolist() == [False, True]


def test_a_device_without_history_gives_empty_tables_with_all_columns(lab: Lab) -> None:
    for table in (states_frame, parameters_frame, events_frame):
        frame = table(lab.registry, lab.device)
        assert len(frame) == 0
        assert "at" in frame.columns
