import pickle
from typing import Any

import numpy as np
import pytest

from benchkit.circuit import solve as solve_module
from benchkit.circuit.netlist import Netlist
from benchkit.circuit.newton import Outcome, first_attempts
from benchkit.circuit.solve import Compiled, compile_netlist
from benchkit.errors import ModelError
from tests.circuit.circuits import Values, follower, spread, transistors, values_of
from tests.circuit.residual import left_over


@pytest.fixture(scope="module")
def double() -> tuple[Netlist, Compiled]:
    netlist = follower(double=True, feeds="sources")
    return netlist, compile_netlist(netlist)


def divider() -> tuple[Netlist, Values]:
    n = Netlist()
    n.supply("rail", "v+", "0")
    n.resistor("top", "v+", "mid")
    n.resistor("bottom", "mid", "0")
    return n, {"rail.volts": 10.0, "rail.limit_a": 0.1, "top": 1e3, "bottom": 3e3}


def test_a_divider() -> None:
    netlist, values = divider()
    s = compile_netlist(netlist).solve(values)
    assert s.converged.all()
    # the supply's 10 mohm and the nodes' 1e-12 S included
    assert s.voltage("mid")[0] == pytest.approx(10.0 * 3e3 / 4000.01, rel=1e-8)
    assert s.current("rail")[0] == pytest.approx(10.0 / 4000.01, rel=1e-8)
    assert s.current("top")[0] == pytest.approx(s.current("bottom")[0], rel=1e-8)
    assert s.between("v+", "mid")[0] == pytest.approx(2.5, rel=1e-4)
    assert s.voltage("0")[0] == 0.0


def test_a_supply_gives_no_more_than_its_limit() -> None:
    netlist, values = divider()
    loads = np.array([200.0, 110.0, 90.0, 10.0, 0.0])
    s = compile_netlist(netlist).solve(values | {"top": loads, "bottom": 1e-3}, 5)
    assert s.converged.all()
    assert s.current("rail")[:2] == pytest.approx(10.0 / loads[:2], rel=1e-3)
    # limited, plus 1 uS times what is missing
    assert s.current("rail")[2:] == pytest.approx(np.full(3, 0.1), rel=2e-4)
    assert s.voltage("v+")[3] == pytest.approx(1.0, rel=1e-3)
    assert s.voltage("v+")[4] == pytest.approx(0.1 * 2e-3, rel=1e-3)  # two resistors held at 1 mohm


def test_a_negative_supply_and_its_sign() -> None:
    n = Netlist()
    n.supply("rail", "0", "v-")
    n.resistor("load", "0", "v-")
    s = compile_netlist(n).solve({"rail.volts": 12.0, "rail.limit_a": 1.0, "load": 1e3})
    assert s.voltage("v-")[0] == pytest.approx(-12.0, rel=1e-4)
    assert s.current("rail")[0] == pytest.approx(12e-3, rel=1e-4)
    assert s.current("load")[0] == pytest.approx(12e-3, rel=1e-4)


def test_a_source_saturates_when_nothing_is_left_to_it() -> None:
    n = Netlist()
    n.supply("rail", "v+", "0")
    n.source("feed", "v+", "x")
    n.resistor("r", "x", "0")
    s = compile_netlist(n).solve(
        {"rail.volts": 10.0, "rail.limit_a": 1.0, "feed.amps": 5e-3, "r": np.array([1e3, 1e6])}, 2
    )
    assert s.current("feed") == pytest.approx(np.array([5e-3, 10.0 / 1e6]), rel=1e-3)
    assert s.voltage("x")[1] < 10.0


@pytest.mark.parametrize("rest", [-3.0, 0.0, 2.0])
def test_a_servo_holds_its_node_from_either_side(rest: float) -> None:
    n = Netlist()
    n.supply("rail+", "v+", "0")
    n.supply("rail-", "0", "v-")
    n.source("feed", "v+", "x")
    n.servo("down", "x", "v-", sense="x")
    n.servo("up", "v+", "y", sense="y")
    n.resistor("ry", "y", "v-")
    s = compile_netlist(n).solve(
        {
            "rail+.volts": 10.0, "rail-.volts": 10.0, "rail+.limit_a": 1.0, "rail-.limit_a": 1.0, "feed.amps": 5e-3,
            "down.rest_v": rest, "down.max_a": 20e-3, "up.rest_v": rest, "up.max_a": 50e-3, "ry": 1e3,
        }
    )  # fmt: skip
    assert s.converged.all()
    assert s.voltage("x")[0] == pytest.approx(rest, abs=30e-6)
    assert s.voltage("y")[0] == pytest.approx(rest, abs=30e-6)
    assert s.current("down")[0] == pytest.approx(5e-3, rel=1e-6)
    assert s.current("up")[0] == pytest.approx((rest + 10.0) / 1e3, rel=1e-4)


def test_a_servo_out_of_reach_gives_what_it_can() -> None:
    n = Netlist()
    n.supply("rail-", "0", "v-")
    n.servo("down", "x", "v-", sense="x")
    n.resistor("r", "0", "x")
    s = compile_netlist(n).solve(
        {"rail-.volts": 10.0, "rail-.limit_a": 1.0, "r": 100.0, "down.rest_v": [-5.0, 1.0, -0.5], "down.max_a": 20e-3},
        3,
    )
    assert s.converged.all()
    assert s.current("down") == pytest.approx(np.array([20e-3, 0.0, 5e-3]), rel=1e-3, abs=1e-9)


def test_an_unknown_conductance_meets_its_condition() -> None:
    netlist, values = divider()
    n = Netlist()
    n.supply("rail", "v+", "0")
    n.resistor("top", "v+", "mid")
    n.unknown("bottom", "mid", "0", "v+", "mid")
    values = {k: v for k, v in values.items() if k != "bottom"} | {"bottom.volts": np.array([2.5, 10.0, 15.0])}
    s = compile_netlist(n).solve(values, 3)
    assert s.converged.all()
    assert s.between("v+", "mid") == pytest.approx(np.array([2.5, 10.0, 15.0]), abs=1e-8)
    # 7.5 V at 2.5 mA; a short; and beyond it only a negative conductance will do
    assert s.conductance("bottom")[0] == pytest.approx(2.5e-3 / 7.5, rel=1e-4)
    assert abs(s.conductance("bottom")[1]) > 10.0
    assert s.conductance("bottom")[2] < 0.0
    assert len(netlist.elements) == 3


def test_a_trimmer_is_found_by_what_it_is_to_bring_about(double: tuple[Netlist, Compiled]) -> None:
    _, compiled = double
    n = follower(double=True, feeds="sources")
    del n.elements["trimmer"]
    n.unknown("trimmer", "end", "bottom", "emitter.upper", "output")
    units = 200
    values = spread(values_of(n), units, 3)
    asked = compile_netlist(n).solve(values | {"trimmer.volts": np.full(units, 10e-3)}, units)
    assert asked.converged.all()
    assert np.median(asked.iterations) <= 9
    ohm = 1.0 / asked.conductance("trimmer")
    again = compiled.solve(values | {"trimmer": ohm}, units)
    usable = ohm > 1.0
    assert usable.sum() > units / 2
    assert again.between("emitter.upper", "output")[usable] == pytest.approx(np.full(usable.sum(), 10e-3), rel=1e-7)


def test_an_ohmmeter_on_resistors_and_junctions() -> None:
    n = Netlist()
    n.ohmmeter("meter", "red", "black")
    n.resistor("r", "red", "black")
    n.transistor("q", "red", "red", "black")
    values: Values = {"meter.amps": 1e-3, "meter.compliance_v": 5.0, "q.IS": 1e-14, "r": np.array([100.0, 1e9, 220.0])}
    s = compile_netlist(n).solve(values, 3)
    drop = s.between("red", "black")
    assert s.converged.all()
    assert drop[0] == pytest.approx(0.1, rel=1e-6)
    assert drop[1] == pytest.approx(0.0258649 * np.log(1e-3 / 1e-14 / (1 + 1 / 100)), rel=1e-4)
    assert drop[2] == pytest.approx(0.22, rel=1e-3)
    gone = compile_netlist(n).solve(values | {"q.polarity": -1.0}, 3)
    assert gone.between("red", "black")[1] == pytest.approx(5.0, abs=0.3)  # open: at its compliance voltage
    assert gone.current("meter")[1] < 1e-6


def test_currents_add_up_in_a_second_way_of_writing_them(double: tuple[Netlist, Compiled]) -> None:
    for netlist in (double[0], follower(double=False, feeds="resistors"), follower(double=True, feeds="resistors")):
        values = spread(values_of(netlist), 60, 9)
        s = compile_netlist(netlist).solve(values, 60)
        assert s.converged.all()
        for unit in range(60):
            share, node = left_over(netlist, s, unit)
            assert share < 1e-7, (node, share)


def test_the_second_way_of_writing_would_see_an_error(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    s = compiled.solve(values_of(netlist))
    s.x[s.plan.index["emitter.upper"]] += 1e-6
    assert left_over(netlist, s, 0)[0] > 1e-5


def test_operating_points_agree_with_what_surrounds_the_transistor(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    s = compiled.solve(spread(values_of(netlist), 50, 2), 50)
    upper, lower = s.transistor("output.upper"), s.transistor("output.lower")
    assert upper.ie_a == pytest.approx(s.current("re.upper"), rel=1e-6)
    assert lower.ie_a == pytest.approx(s.current("re.lower"), rel=1e-6)
    assert upper.ib_a == pytest.approx(s.current("stopper.upper"), rel=1e-6)
    assert (upper.vbe_v > 0.3).all()
    assert (lower.vbe_v > 0.3).all()
    assert (lower.ic_a > 0).all()
    assert upper.vbe_v == pytest.approx(s.between("base.upper", "emitter.upper"))
    assert lower.vbe_v == pytest.approx(s.between("emitter.lower", "base.lower"))
    assert lower.vce_v == pytest.approx(s.between("emitter.lower", "v-"))
    total = sum(s.transistor(t).power_w for t in transistors(netlist))
    given = s.current("rail+") * s.voltage("v+") - s.current("rail-") * s.voltage("v-")
    heated = total + sum(s.current(e.name) * s.between(*ends) for e, ends in _passive(netlist))
    assert heated == pytest.approx(given, rel=1e-6)


def _passive(netlist: Netlist):  # type: ignore[no-untyped-def]
    from benchkit.circuit.netlist import Resistor, Servo, Source

    for e in netlist.elements.values():
        if isinstance(e, Resistor):
            yield e, (e.a, e.b)
        elif isinstance(e, (Source, Servo)):
            yield e, (e.from_node, e.to_node)


def test_polarity_is_a_value_of_each_unit() -> None:
    n = Netlist()
    n.supply("rail", "v", "0")
    n.resistor("rc", "v", "c")
    n.resistor("rb", "v", "b")
    n.transistor("q", "c", "b", "0")
    values: Values = {
        "rail.volts": [10.0, 10.0, -10.0],
        "rail.limit_a": 1.0,
        "rc": 1e3,
        "rb": 1e6,
        "q.polarity": [1, -1, -1],
    }
    s = compile_netlist(n).solve(values, 3)
    assert s.converged.all()
    assert s.transistor("q").ic_a[0] == pytest.approx(s.transistor("q").ic_a[2], rel=1e-9)
    assert s.voltage("c")[2] == pytest.approx(-s.voltage("c")[0], rel=1e-9)
    assert abs(s.transistor("q").ic_a[1]) < 1e-9
    assert s.voltage("c")[1] == pytest.approx(10.0, rel=1e-3)


def test_units_are_independent_of_their_neighbours(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    values = spread(values_of(netlist), 64, 4)
    together = compiled.solve(values, 64)
    for unit in (0, 17, 63):
        alone = compiled.solve({k: float(v[unit]) for k, v in values.items()}, 1)
        assert together.x[:, unit] == pytest.approx(alone.x[:, 0], rel=1e-9, abs=1e-11)


def test_the_same_values_give_the_same_digits(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    values = spread(values_of(netlist), 100, 4)
    first = compiled.solve(values, 100)
    compiled.solve(spread(values_of(netlist, rails_v=20.0, limit_a=0.05), 300, 8), 300)
    second = compiled.solve(values, 100)
    third = pickle.loads(pickle.dumps(compiled)).solve(values, 100)
    assert np.array_equal(first.x, second.x)
    assert np.array_equal(first.x, third.x)


def test_chunks_change_nothing_that_matters(double: tuple[Netlist, Compiled], monkeypatch: pytest.MonkeyPatch) -> None:
    netlist, compiled = double
    values = spread(values_of(netlist), 130, 4)
    whole = compiled.solve(values, 130)
    monkeypatch.setattr(solve_module, "CHUNK_UNITS", 50)
    parts = compiled.solve(values, 130)
    assert parts.converged.all()
    assert parts.x == pytest.approx(whole.x, rel=1e-9, abs=1e-11)


def test_a_warm_start_saves_iterations(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    cold = compiled.solve(values_of(netlist))
    for start in (cold, {node: cold.voltage(node) for node in netlist.nodes()}):
        warm = compiled.solve(values_of(netlist, trimmer=252.0), start=start)
        assert warm.converged.all()
        assert warm.iterations[0] < cold.iterations[0]
    again = compiled.solve(values_of(netlist), start=cold)
    assert again.iterations[0] <= 1
    assert again.x == pytest.approx(cold.x, rel=1e-9, abs=1e-12)


def test_a_start_from_other_rails_and_another_rest_voltage_is_a_good_one(double: tuple[Netlist, Compiled]) -> None:
    """A servo and a supply have no slope where the old solution leaves them; they start on their knees nevertheless."""
    netlist, compiled = double
    start = compiled.solve(values_of(netlist))
    values = values_of(netlist) | {"feed.lower.rest_v": np.linspace(-0.02, 0.02, 50), "rail+.volts": 30.0}
    s = compiled.solve(values, 50, start=start)
    assert s.converged.all()
    assert s.iterations.max() <= 5
    assert s.voltage("output") == pytest.approx(values["feed.lower.rest_v"], abs=30e-6)


def test_a_senseless_start_still_leads_to_the_operating_point(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    good = compiled.solve(values_of(netlist))
    wild = compiled.solve(values_of(netlist), start=dict.fromkeys(netlist.nodes(), 1e3))
    assert wild.converged.all()
    assert wild.x == pytest.approx(good.x, rel=1e-8, abs=1e-10)


def test_a_solution_of_a_like_circuit_is_a_start(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    other = follower(double=True, feeds="sources", faulty=True)
    start = compiled.solve(values_of(netlist))
    s = compile_netlist(other).solve(values_of(other), start=start)
    assert s.converged.all()
    assert s.iterations[0] <= 4


def test_rest_voltages_start_a_cold_solve(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    s = compiled.solve(values_of(netlist), initial={"output": 0.0, "top": 1.2, "bottom": -1.2, "unheard of": 3.0})
    assert s.converged.all()


def test_iterations_and_residuals_are_each_units_own(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    s = compiled.solve(spread(values_of(netlist), 500, 4), 500)
    assert s.iterations.shape == s.residual_a.shape == s.converged.shape == (500,)
    assert s.iterations.dtype == np.int64
    assert len(np.unique(s.iterations)) > 1
    assert (s.residual_a < 1e-7).all()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"bottom": None}, "value 'bottom' is missing"),
        ({"botom": 1.0}, "no value 'botom'. Expected bottom"),
        ({"bottom": np.ones(3)}, "bottom has 3 values"),
        ({"rail.limit_a": 0.0}, "rail.limit_a is 0.0 A. Expected a current above 0 A"),
        ({"bottom": float("nan")}, "bottom is not a number in 1 units"),
    ],
)
def test_wrong_values_are_refused_by_name(change: Values, message: str) -> None:
    netlist, values = divider()
    asked = {k: v for k, v in (values | change).items() if v is not None}
    with pytest.raises(ModelError, match=message):
        compile_netlist(netlist).solve(asked, 2)


def test_other_mistakes_are_refused(double: tuple[Netlist, Compiled]) -> None:
    netlist, compiled = double
    s = compiled.solve(spread(values_of(netlist), 2, 0), 2)
    with pytest.raises(ModelError, match="no node 'nowhere'"):
        s.voltage("nowhere")
    with pytest.raises(ModelError, match="no element 'nothing'"):
        s.current("nothing")
    with pytest.raises(ModelError, match="'trimmer' is no transistor"):
        s.transistor("trimmer")
    with pytest.raises(ModelError, match="'spreader' is a transistor"):
        s.current("spreader")
    with pytest.raises(ModelError, match="no unknown conductance"):
        s.conductance("trimmer")
    with pytest.raises(ModelError, match="0 units"):
        compiled.solve(values_of(netlist), 0)
    with pytest.raises(ModelError, match="the start has 2 units"):
        compiled.solve(values_of(netlist), 1, start=s)
    with pytest.raises(ModelError, match="'top' has 2 values"):
        compiled.solve(values_of(netlist), 1, start={"top": np.ones(2)})


def test_a_transistor_without_resistances_has_no_internal_nodes() -> None:
    n = Netlist()
    n.source("feed", "0", "b")
    n.transistor("q", "b", "b", "0")
    n.resistor("r", "b", "0")
    compiled = compile_netlist(n)
    plain = compiled.solve({"feed.amps": 1e-3, "r": 1e6, "q.IS": 1e-14})
    assert [name for name in plain.plan.names if "\x00" in name] == []
    mixed = compiled.solve({"feed.amps": 1e-3, "r": 1e6, "q.IS": 1e-14, "q.RB": np.array([0.0, 100.0])}, 2)
    assert mixed.plan.nodes == 2


def _few(values: Values, which: slice) -> Values:
    return {key: value[which] if np.size(value) > 1 else value for key, value in values.items()}


def test_groups_are_solved_as_each_alone(double: tuple[Netlist, Compiled]) -> None:
    """From a pilot of their own where a group is large, with several groups and a small one in a batch."""
    netlist, circuit = double
    values = spread(values_of(netlist), 77, 4)
    parts = (slice(0, 35), slice(35, 42), slice(42, 77))
    kin = np.repeat(np.arange(3), [35, 7, 35])
    together = circuit.solve(values, 77, effort="borrow", kin=kin)
    assert together.converged.all()
    for part in parts:
        alone = circuit.solve(_few(values, part), part.stop - part.start, effort="borrow")
        np.testing.assert_allclose(together.x[:, part], alone.x, rtol=1e-7, atol=1e-9)
        np.testing.assert_array_equal(together.iterations[part], alone.iterations)


def test_a_solution_is_lent_within_its_group_only(
    double: tuple[Netlist, Compiled], monkeypatch: pytest.MonkeyPatch
) -> None:
    netlist, circuit = double
    values = spread(values_of(netlist), 12, 4)
    solved = circuit.solve(values, 12)
    kin = np.repeat(np.arange(3), 4)
    lost = np.array([1, 4, 5, 6, 7, 9, 10])  # one of the first group, all of the second, two of the third
    attempts = first_attempts

    def some_fail(*arguments: Any) -> Outcome:
        outcome = attempts(*arguments)
        outcome.done[lost] = False
        outcome.x[:, lost] = np.nan
        return outcome

    monkeypatch.setattr(solve_module, "first_attempts", some_fail)
    found = circuit.solve(values, 12, effort="borrow", kin=kin)
    np.testing.assert_array_equal(np.flatnonzero(~found.converged), [4, 5, 6, 7])
    own = found.converged
    np.testing.assert_allclose(found.x[:, own], solved.x[:, own], rtol=1e-7, atol=1e-9)
    assert circuit.solve(values, 12, effort="borrow").converged.all()
