"""The judge of rest as a whole: what begins a change, what is said of it, when it is over."""

from __future__ import annotations

import json
import math
import pickle
from dataclasses import replace
from itertools import pairwise

import pytest

from monitor.blocks import NAN
from monitor.dosing.ledger import Struck, Water
from tests.unit.settling_tank import (
    BAND_PCT,
    Believed,
    Happenings,
    Near,
    dose,
    ends,
    exponential,
    judge,
    outlooks,
    rests,
    run,
    seconds,
)

STIRRED = exponential(15.0, dose())
TRUTH_PCT = dose().landing(0.08, 0.0)[0]
REST_T = next(t for t in range(101, 300) if abs(STIRRED(t) - TRUTH_PCT) <= BAND_PCT)


def test_a_right_dose_comes_to_rest_and_agrees() -> None:
    (rest,) = rests(run(judge(), seconds(STIRRED, 300), {100: (dose(),)}))
    assert rest["dose_t"] == 100.0
    assert REST_T - 12.0 < rest["t"] < REST_T + 30.0
    assert abs(rest["rested_t"] - REST_T) < 6.0
    assert abs(rest["salinity_pct"] - TRUTH_PCT) <= rest["u95_pct"]
    assert abs(rest["predicted_pct"] - TRUTH_PCT) <= rest["predicted_u95_pct"]
    assert rest["verdict"] == "agrees"
    assert "why" not in rest


def test_an_outlook_is_said_at_once_and_every_five_seconds() -> None:
    said = run(judge(), seconds(STIRRED, 300), {100: (dose(),)})
    looks = outlooks(said)
    assert looks[0]["t"] == 101.0
    assert all(b["t"] - a["t"] <= 5.0 for a, b in pairwise(looks))
    assert rests(said)[0]["t"] - looks[-1]["t"] <= 5.0
    for look in looks:
        assert abs(look["salinity_pct"] - TRUTH_PCT) <= look["u95_pct"] + 1e-4
        assert look["rest_in_s"] >= 0.0
        assert look["rest_in_u95_s"] > 0.0


def test_no_rest_while_the_dose_still_runs_in() -> None:
    slow = dose(open_s=60.0, volume_ml=8.0)  # a step inside the band from the start
    (rest,) = rests(run(judge(), seconds(exponential(5.0, slow), 300), {100: (slow,)}))
    assert rest["t"] > slow.end_s


def test_part_of_the_dose_is_found_out() -> None:
    half = exponential(15.0, dose(volume_ml=26.0))
    (rest,) = rests(run(judge(), seconds(half, 400), {100: (dose(),)}))
    assert rest["verdict"] == "disagrees"
    assert rest["why"][0].startswith("part of the dose: 2")


def test_the_other_liquid_is_named_and_called_as_soon() -> None:
    other = dose(liquid="deionised", liquid_pct=0.0, liquid_u_pct=1e-4)
    (rest,) = rests(run(judge(), seconds(exponential(15.0, other), 400), {100: (dose(),)}))
    assert rest["verdict"] == "disagrees"
    assert rest["why"][0].startswith("other liquid: deionised")
    assert rest["t"] < REST_T + 30.0


def test_rest_is_lost_to_the_next_dose() -> None:
    second = dose(250.0, tank_ml=1252.5)
    after = exponential(15.0, second, TRUTH_PCT)
    said = run(
        judge(),
        seconds(lambda t: STIRRED(t) if t < 250.0 else after(t), 450),
        {100: (dose(),), 250: (second,)},
    )
    first, last = rests(said)
    (end,) = ends(said)
    assert {**end, "t": 0.0, "to_t": None} == {**first, "t": 0.0}
    assert (end["t"], end["to_t"]) == (251.0, 250.0)
    assert (last["dose_t"], last["verdict"]) == (250.0, "agrees")


def test_a_dose_overtaken_gets_no_rest_and_the_next_one_is_right() -> None:
    second = dose(115.0, tank_ml=1252.5)
    step = exponential(25.0, second, TRUTH_PCT)
    early = exponential(25.0, dose())
    said = run(
        judge(),
        seconds(lambda t: early(t) + step(t) - TRUTH_PCT, 400),
        {100: (dose(),), 115: (second,)},
    )
    (rest,) = rests(said)
    assert (rest["dose_t"], rest["verdict"]) == (115.0, "agrees")


def test_a_dose_recorded_late_is_answered_at_once() -> None:
    large = dose(volume_ml=150.0, met_k=300)
    said = run(judge(), seconds(exponential(15.0, large), 330), {300: (large,)})
    unrecorded, answered = rests(said)
    assert unrecorded["dose_t"] is None
    assert unrecorded["verdict"] == "no-prediction"
    (end,) = ends(said)
    assert end["dose_t"] is None
    assert (answered["dose_t"], answered["verdict"]) == (100.0, "agrees")
    assert answered["t"] <= 303.0


def test_a_dose_that_does_not_count_is_not_answered() -> None:
    said = run(judge(), seconds(lambda t: 0.08, 300), {100: (dose(counts=False),)})
    assert said == []


def test_a_disturbance_loses_rest_and_rest_is_found_again() -> None:
    def stirred_up(t: float) -> float:
        return STIRRED(t) + (0.006 * math.exp(-(t - 300.0) / 10.0) if t > 300.0 else 0.0)

    said = run(judge(), seconds(stirred_up, 450), {100: (dose(),)})
    answered, again = rests(said)
    (end,) = ends(said)
    assert 298.0 <= end["to_t"] <= end["t"] < 306.0
    assert again["dose_t"] is None
    assert abs(again["salinity_pct"] - TRUTH_PCT) <= again["u95_pct"]
    assert answered["dose_t"] == 100.0


def test_a_dose_struck_out_while_it_mixes_is_a_change_nobody_recorded() -> None:
    met: Happenings = {100: (dose(),), 115: (Struck(dose(), 115),)}
    (rest,) = rests(run(judge(), seconds(STIRRED, 400), met))
    assert rest["dose_t"] is None
    assert rest["verdict"] == "no-prediction"


def test_water_while_a_dose_mixes_leaves_nothing_to_predict() -> None:
    met: Happenings = {100: (dose(),), 115: (Water(115.0, 1200.0, "115.0", 115),)}
    (rest,) = rests(run(judge(), seconds(STIRRED, 400), met))
    assert (rest["dose_t"], rest["verdict"]) == (100.0, "no-prediction")
    assert rest["predicted_pct"] is None


def test_a_dose_at_the_very_start_is_answered_without_a_prediction() -> None:
    begun = dose(0.2)
    (rest,) = rests(run(judge(), seconds(exponential(15.0, begun), 300), {0: (begun,)}))
    assert (rest["dose_t"], rest["verdict"]) == (0.2, "no-prediction")
    assert abs(rest["salinity_pct"] - TRUTH_PCT) <= rest["u95_pct"]


def test_no_rest_on_a_probe_not_believed_and_its_readings_do_not_count() -> None:
    def bubble(t: float) -> float:  # 6 % too low for 80 s
        return STIRRED(t) * (0.94 if 118.0 <= t < 198.0 else 1.0)

    fault = {"lodged-bubble": {"from_t": 118.0}}

    def trust(k: int) -> Believed:
        if 134 <= k < 210:
            return Believed("not-believed", faults=fault)
        return Believed()

    said = run(judge(), seconds(bubble, 400), {100: (dose(),)}, trust)
    (rest,) = rests(said)
    assert rest["t"] > 210.0
    assert (rest["dose_t"], rest["verdict"]) == (100.0, "agrees")
    assert not [f for f in said if 135.0 <= f["t"] <= 210.0]


def test_bubbles_are_left_out_by_what_lies_near_the_level() -> None:
    def bubbly(t: float) -> float:  # every fourth second is half a bubble's
        return STIRRED(t) * (0.9 if t > 150.0 and int(t) % 4 == 0 else 1.0)

    made = seconds(bubbly, 400)
    near = [math.log(12.0 + 80.0 * STIRRED(k + 0.5) ** -0.95) for k in range(400)]

    def trust(k: int) -> Believed:
        if k < 160:
            return Believed()
        fault = {"bubbles": {"from_t": 150.0}}
        return Believed("doubtful", faults=fault, level=Near(near[k]))

    settling = judge()
    said = run(settling, made, {100: (dose(),)}, trust)
    assert len(rests(said)) - len(ends(said)) == 1  # lost to the first bubbles, found again
    assert not settling.moving
    assert not [f for f in said if f["t"] > 220.0]
    assert abs(settling.shown_pct - TRUTH_PCT) < 3e-4


def test_a_fault_forgets_its_own_readings_only() -> None:
    """A creep that has been in force for long does not take the readings with it."""
    faults = {"fouling": {"from_t": 5.0}, "no-pulses": {"from_t": 118.0}}

    def trust(k: int) -> Believed:
        return (
            Believed("not-believed", usable=False, faults=faults) if 122 <= k < 140 else Believed()
        )

    said = run(judge(), seconds(STIRRED, 400), {100: (dose(),)}, trust)
    (rest,) = rests(said)
    assert (rest["dose_t"], rest["verdict"]) == (100.0, "agrees")


def test_not_while_the_probe_is_out_and_after_it_the_dose_is_still_answered() -> None:
    def trust(k: int) -> Believed:
        return Believed(usable=False, out=True) if 112 <= k < 150 else Believed()

    said = run(judge(), seconds(STIRRED, 400), {100: (dose(),)}, trust)
    (rest,) = rests(said)
    assert rest["t"] > 150.0
    assert (rest["dose_t"], rest["verdict"]) == (100.0, "no-prediction")
    assert not [f for f in said if 113.0 <= f["t"] <= 150.0]


def test_a_doubtful_probe_is_said_with_a_wider_doubt() -> None:
    made, met = seconds(STIRRED, 300), {100: (dose(),)}
    (sure,) = rests(run(judge(), made, met))
    (doubtful,) = rests(run(judge(), made, met, lambda k: Believed("doubtful", widen=0.03)))
    assert doubtful["doubtful"] is True
    assert "doubtful" not in sure
    assert doubtful["u95_pct"] > 2.0 * 0.03 * TRUTH_PCT > sure["u95_pct"]


def test_a_silence_while_it_mixes_is_survived() -> None:
    said = run(
        judge(), seconds(lambda t: NAN if 115 <= t < 150 else STIRRED(t), 400), {100: (dose(),)}
    )
    (rest,) = rests(said)
    assert (rest["dose_t"], rest["verdict"]) == (100.0, "agrees")


def test_stray_seconds_do_not_keep_rest_away() -> None:
    def strays(t: float) -> float:
        return STIRRED(t) + (0.008 if t > 125.0 and int(t) % 9 == 0 else 0.0)

    (rest,) = rests(run(judge(), seconds(strays, 400), {100: (dose(),)}))
    assert rest["t"] < REST_T + 40.0
    assert abs(rest["salinity_pct"] - TRUTH_PCT) <= rest["u95_pct"]


@pytest.mark.parametrize("drift_pct_per_h", [0.0, 0.004, -0.02])
def test_still_water_says_nothing(drift_pct_per_h: float) -> None:
    settling = judge()
    assert run(settling, seconds(lambda t: 0.08 + drift_pct_per_h * t / 3600.0, 3600)) == []
    assert not settling.moving
    assert settling.heading == 0.0
    assert abs(settling.shown_pct - 0.08 - drift_pct_per_h) < 3e-4
    assert 0.0 < settling.u95_pct < 0.002


def test_heading_is_where_an_unsettled_dose_takes_it() -> None:
    settling = judge()
    run(settling, seconds(STIRRED, 112), {100: (dose(),)})
    assert (settling.moving, settling.heading) == (True, 1.0)


def test_without_a_calibration_nothing_is_said() -> None:
    settling = judge()
    settling.doubt = settling.records = settling.sieve = None
    made = seconds(lambda t: NAN, 200)
    assert run(settling, made, {100: (dose(),)}) == []
    assert settling.carry() == {}


def test_what_is_carried_goes_on_as_if_nothing_had_happened() -> None:
    made, met = seconds(STIRRED, 300), {100: (dose(),)}
    (whole,) = rests(run(judge(), made, met))
    for cut in (101, 112, 120):
        before = judge()
        run(before, made[:cut], met)
        carried = json.loads(json.dumps(before.carry()))
        (rest,) = rests(run(judge(carried), made[cut:], met if cut <= 100 else {}))
        assert (rest["dose_t"], rest["verdict"]) == (100.0, "agrees")
        assert abs(rest["t"] - whole["t"]) <= 8.0
        assert rest["salinity_pct"] == pytest.approx(whole["salinity_pct"], abs=3e-4)


def test_a_rest_in_force_is_carried_to_its_end() -> None:
    made = seconds(STIRRED, 300)
    before = judge()
    run(before, made[:250], {100: (dose(),)})
    after = judge(json.loads(json.dumps(before.carry())))
    assert not after.moving
    (end,) = ends(run(after, made[250:], {280: (dose(280.0, tank_ml=1252.5),)}))
    assert (end["dose_t"], end["to_t"]) == (100.0, 280.0)


def test_state_can_be_pickled_at_any_moment() -> None:
    made, met = seconds(STIRRED, 300), {100: (dose(),)}
    whole = run(judge(), made, met)
    for cut in (60, 118, 130, 200):
        settling = judge()
        said = run(settling, made[:cut], met)
        settling = pickle.loads(pickle.dumps(settling))
        later = {k: v for k, v in met.items() if k >= cut}
        assert said + run(settling, made[cut:], later) == whole


def test_volume_unknown_is_no_prediction() -> None:
    unknown = replace(dose(), tank_ml=NAN)
    (rest,) = rests(run(judge(), seconds(STIRRED, 400), {100: (unknown,)}))
    assert (rest["dose_t"], rest["verdict"]) == (100.0, "no-prediction")
