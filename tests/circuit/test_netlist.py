import pytest

from benchkit.circuit.netlist import Netlist, Servo
from benchkit.circuit.solve import compile_netlist
from benchkit.errors import ModelError


def test_nodes_come_in_the_order_of_their_naming_without_the_reference() -> None:
    n = Netlist()
    n.resistor("r", "b", "0")
    n.transistor("q", "c", "b", "a")
    n.servo("s", "a", "d", sense="e")
    assert n.nodes() == ("b", "c", "a", "d", "e")


def test_a_name_can_be_taken_once() -> None:
    n = Netlist()
    n.resistor("r", "a", "0")
    with pytest.raises(ModelError, match="two elements named 'r'"):
        n.source("r", "a", "0")


@pytest.mark.parametrize(
    ("from_node", "to_node", "given", "expected"),
    [("v+", "x", None, "to"), ("x", "v+", None, "from"), ("x", "y", None, "from"), ("v+", "x", "from", "from")],
)
def test_a_servo_out_of_a_supply_lifts_what_it_senses(from_node, to_node, given, expected) -> None:  # type: ignore[no-untyped-def]
    n = Netlist()
    n.supply("rail", "v+", "0")
    n.servo("s", from_node, to_node, sense="x", senses=given)
    servo = n.elements["s"]
    assert isinstance(servo, Servo)
    assert servo.senses == expected


def test_an_empty_netlist_is_refused() -> None:
    with pytest.raises(ModelError, match="no node"):
        compile_netlist(Netlist())


def test_adding_to_a_netlist_leaves_what_was_compiled_from_it_alone() -> None:
    n = Netlist()
    n.supply("s", "a", "0")
    n.resistor("r", "a", "0")
    compiled = compile_netlist(n)
    n.resistor("r2", "a", "0")
    compiled.solve({"s.volts": 1.0, "s.limit_a": 1.0, "r": 1e3})
    with pytest.raises(ModelError, match="no value 'r2'"):
        compiled.solve({"s.volts": 1.0, "s.limit_a": 1.0, "r": 1e3, "r2": 1.0})
