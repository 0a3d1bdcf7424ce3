"""Machines: those that come with the package are sound, and all faults of a file are told together."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from breakstep.errors import MachineError
from breakstep.forecast.basis import basis_of
from breakstep.forecast.machines import load_machine, machine_from, shipped
from breakstep.forecast.question import Question
from breakstep.forecast.setting import setting_of
from tests.unit.forecast.recorded import Ring, hot

SOUND = {
    "name": "mine",
    "title": "Mine",
    "cores": 4,
    "network": {"latency_us": 10.0, "bandwidth_gbytes": 1.0},
}


@pytest.mark.parametrize("name", sorted(shipped()))
def test_a_machine_that_comes_with_the_package_is_sound_and_says_what_is_common_practice(name: str) -> None:
    machine = load_machine(name)
    assert machine.name == name
    assert {"network.latency_us", "network.bandwidth_gbytes"} <= set(machine.common_practice)


def test_there_are_a_laptop_two_clusters_and_a_very_large_one() -> None:
    slots = {name: load_machine(name).slots for name in shipped()}
    assert slots["laptop"] < slots["office_cluster"] < slots["fast_cluster"] < slots["very_large"]
    assert slots["very_large"] >= 1_000_000


def test_all_faults_come_together() -> None:
    wrong = SOUND | {"cores": 0, "colour": "red", "network": {"latency_us": -1.0}, "speed": "fast"}
    with pytest.raises(MachineError) as caught:
        machine_from(wrong, "mine.toml")
    faults = caught.value.details["faults"]
    found = {fault.split(": ")[1] for fault in faults}
    assert found == {"cores", "colour", "network.latency_us", "network.bandwidth_gbytes", "speed"}
    assert all(fault.startswith("mine.toml: ") for fault in faults)


def test_what_64_bits_do_not_hold_is_refused() -> None:
    wrong = SOUND | {"speed": 1e-15, "memory_gbytes": 1e15, "network": {"latency_us": 1.0, "bandwidth_gbytes": 1e-15}}
    with pytest.raises(MachineError) as caught:
        machine_from(wrong, "mine.toml")
    assert len(caught.value.details["faults"]) == 3


def test_common_practice_names_keys_that_are_there() -> None:
    with pytest.raises(MachineError, match=r"common_practice: network\.speed"):
        machine_from(SOUND | {"common_practice": ["network.speed"]}, "mine.toml")


def test_a_file_that_is_no_toml_and_a_name_that_is_unknown(tmp_path: Path) -> None:
    file = tmp_path / "mine.toml"
    file.write_text("cores = ")
    with pytest.raises(MachineError, match="cannot be read as TOML"):
        load_machine(str(file))
    with pytest.raises(MachineError, match="known: recorded, fast_cluster, laptop"):
        load_machine("labtop")
    with pytest.raises(MachineError, match="there is none"):
        load_machine(str(tmp_path / "other.toml"))


def test_workers_fill_one_node_before_the_network_counts() -> None:
    basis, machine = basis_of([Ring(hot()).profile()]), load_machine("office_cluster")
    inside, across = (setting_of(basis, machine, Question(), workers) for workers in (16, 17))
    assert (inside.nodes, across.nodes) == (1, 2)
    assert across.model.alpha_ns - inside.model.alpha_ns == 29_000  # 30 us against 1 us
    assert not inside.model.contention
    assert across.model.contention


@pytest.mark.parametrize("name", sorted(shipped()))
def test_shipped_files_say_that_they_are_generic_or_invented(name: str) -> None:
    text = shipped()[name].read_text(encoding="utf-8")
    assert "invented" in text.lower() or "generic" in text.lower()
    tomllib.loads(text)
