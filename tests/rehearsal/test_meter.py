"""The meter: its errors stay inside its specification, its ranges and headers are those of a bench meter."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.rehearsal.meter import FUNCTIONS, OVERLOAD, SPECIFICATION, Meter, Sensed


class Clips:
    """Clips on a value that a test chooses."""

    def __init__(self, value: float = 0.0, noise: float = 0.0) -> None:
        self.sensed = Sensed(value, noise)
        self.asked: list[tuple[str, float | None]] = []
        self.since_probe_s = 100.0
        self.probe_moves = 0

    def sense(self, function: str, full_scale: float | None) -> Sensed:
        self.asked.append((function, full_scale))
        return self.sensed


def meter_on(value: float, seed: int = 0) -> tuple[Meter, Clips]:
    clips = Clips(value)
    return Meter(clips, np.random.default_rng(seed)), clips


def ask(meter: Meter, question: str) -> float:
    reply = meter.handle(question)
    assert reply is not None, meter.handle("SYST:ERR?")
    return float(reply)


QUESTIONS = {
    "dc volts": "MEAS:VOLT:DC?",
    "ac volts": "MEAS:VOLT:AC?",
    "dc current": "MEAS:CURR:DC?",
    "ohms": "MEAS:RES?",
    "ohms 4-wire": "MEAS:FRES?",
    "diode": "MEAS:DIOD?",
    "temperature": "MEAS:TEMP?",
}


def test_every_function_has_a_question() -> None:
    assert set(QUESTIONS) == set(FUNCTIONS.values()) == set(SPECIFICATION.rows)


@pytest.mark.parametrize("function", QUESTIONS)
def test_readings_stay_inside_the_stated_specification(function: str) -> None:
    outside = total = 0
    errors = []
    for seed in range(40):
        for row in SPECIFICATION.rows[function]:
            for share in (0.15, 0.5, 0.95):
                true = share * row.full_scale
                meter, _ = meter_on(true, seed)
                half_width = SPECIFICATION.row(function, true).half_width(true)
                error = ask(meter, QUESTIONS[function]) - true
                errors.append(error / half_width)
                outside += abs(error) > half_width
                total += 1
    assert outside <= 0.003 * total
    # An instrument without errors would be no test of anybody: they fill a good part of the specification.
    assert np.std(errors) > 0.2


def test_errors_belong_to_the_instrument_and_noise_to_the_reading() -> None:
    meter, _ = meter_on(5.0, 3)
    readings = [ask(meter, "MEAS:VOLT:DC?") for _ in range(200)]
    noise, offset = np.std(readings), np.mean(readings) - 5.0
    assert 0.0 < noise < 1e-5
    assert abs(offset) > 3.0 * noise / math.sqrt(200)
    other, _ = meter_on(5.0, 4)
    assert abs(ask(other, "MEAS:VOLT:DC?") - np.mean(readings)) > 5.0 * noise


def test_gain_is_common_to_readings_on_one_range() -> None:
    # Two readings on one range: their difference has the gain error of the difference, not an offset.
    meter, clips = meter_on(0.02, 5)
    first = np.mean([ask(meter, "MEAS:VOLT:DC?") for _ in range(400)])
    clips.sensed = Sensed(0.0202)
    second = np.mean([ask(meter, "MEAS:VOLT:DC?") for _ in range(400)])
    assert second - first == pytest.approx(0.0002, abs=0.0002 * 4e-5 + 4.0 * 2.1e-7 * math.sqrt(2.0 / 400.0))


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_overload(sign: float) -> None:
    # SCPI-1999 volume 1, 7.2.1: +infinity is 9.9E37, -infinity -9.9E37.
    meter, clips = meter_on(sign * math.inf)
    assert ask(meter, "MEAS:RES?") == sign * OVERLOAD
    assert meter.handle("STAT:QUES:COND?") == "512"
    clips.sensed = Sensed(sign * 1200.0)
    assert ask(meter, "MEAS:VOLT:DC?") == sign * OVERLOAD
    assert meter.handle("STAT:QUES:COND?") == "1"
    assert meter.handle("SYST:ERR?") == '0,"No error"'
    clips.sensed = Sensed(1.0)
    ask(meter, "MEAS:VOLT:DC?")
    assert meter.handle("STAT:QUES:COND?") == "0"


def test_a_range_that_was_asked_for_is_kept() -> None:
    meter, clips = meter_on(0.5)
    assert ask(meter, "MEAS:VOLT:DC? 100") == pytest.approx(0.5, abs=0.001)
    assert clips.asked[-1] == ("dc volts", 100.0)
    assert ask(meter, "MEAS:VOLT:DC? 0.1") == OVERLOAD
    assert ask(meter, "MEAS:VOLT:DC? 300 mV") == pytest.approx(0.5, abs=0.001)
    assert clips.asked[-1] == ("dc volts", 1.0)
    assert ask(meter, "MEAS:VOLT:DC? MAX") == pytest.approx(0.5, abs=0.02)
    assert ask(meter, "MEAS:VOLT:DC? AUTO") == pytest.approx(0.5, abs=1e-4)
    assert clips.asked[-1][1] is None
    assert meter.handle("MEAS:VOLT:DC? 2000") is None
    assert meter.handle("SYST:ERR?") == '-222,"Data out of range"'


def test_configure_read_and_samples() -> None:
    meter, clips = meter_on(0.5)
    assert meter.handle("FETC?") is None
    assert meter.handle("SYST:ERR?") == '-230,"Data corrupt or stale"'
    meter.handle("CONF:VOLT:DC 10;:SAMP:COUN 3")
    assert meter.handle("CONF?") == '"VOLT +1.00000000E+01"'
    reply = meter.handle("READ?")
    assert reply is not None
    assert len(reply.split(",")) == 3
    assert meter.handle("FETC?") == reply
    assert clips.asked == [("dc volts", 10.0)] * 3
    # MEASure forgets range and count (instrument manuals).
    ask(meter, "MEAS:VOLT:DC?")
    assert meter.handle("CONF?") == '"VOLT AUTO"'
    assert meter.handle("SAMP:COUN?") == "1"
    meter.handle("CONF:FRES;*RST")
    assert meter.handle("CONF?") == '"VOLT AUTO"'


def test_two_wires_read_their_leads_and_four_do_not() -> None:
    leads = []
    for seed in range(20):
        meter, _ = meter_on(0.22, seed)
        assert ask(meter, "MEAS:FRES?") == pytest.approx(0.22, abs=0.0041)
        leads.append(ask(meter, "MEAS:RES?") - 0.22)
    assert 0.07 < min(leads) < max(leads) < 0.2


def test_a_clip_just_moved_adds_a_thermal_voltage_that_fades() -> None:
    meter, clips = meter_on(0.0, 1)
    at_rest = np.mean([ask(meter, "MEAS:VOLT:DC?") for _ in range(50)])
    moved = []
    for _ in range(60):
        clips.probe_moves += 1
        clips.since_probe_s = 0.0
        fresh = ask(meter, "MEAS:VOLT:DC?") - at_rest
        clips.since_probe_s = 60.0
        late = ask(meter, "MEAS:VOLT:DC?") - at_rest
        moved.append((fresh, late))
    fresh_sd, late_sd = np.std(moved, axis=0)
    assert 0.5e-6 < fresh_sd < 3e-6
    assert late_sd < 0.5 * fresh_sd


def test_the_same_seed_and_questions_give_the_same_replies() -> None:
    questions = ["MEAS:VOLT:DC?", "MEAS:RES?", "CONF:VOLT:AC 1", "READ?", "MEAS:TEMP?"]
    runs = []
    for _ in range(2):
        meter, _ = meter_on(0.3, 9)
        runs.append([meter.handle(question) for question in questions])
    assert runs[0] == runs[1]
