"""The command from end to end, and what its figures and its text must hold. No speed is asserted here."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from breakstep.measure.kernels import COMPARISONS, requirements, warnings
from breakstep.measure.timing import Row, Spread
from breakstep.report.kernels import kernel_lines


def row(what: str, median: float, needed: float | None, judged: bool = True) -> Row:
    return Row(what, 1.0, median, Spread(median, median, median), needed, judged)


def test_requirements_list_all_that_is_asked_for() -> None:
    rows = {"hydro": [row("x", 6.0, 5.0), row("y", 4.0, 5.0), row("stellar", 2.0, None)]}
    rows["threads"] = [row("burning", 1.0, 0.9, judged=False)]
    title, crews = COMPARISONS["hydro"][0], COMPARISONS["threads"][0]
    assert requirements(rows) == [
        {"what": f"{title}: x", "ratio": 6.0, "needed": 5.0, "met": True},
        {"what": f"{title}: y", "ratio": 4.0, "needed": 5.0, "met": False},
        {"what": f"{crews}: burning", "ratio": 1.0, "needed": 0.9, "met": None},
    ]


def test_one_core_is_worth_a_warning() -> None:
    good, unclear = [row("a", 1.0, 0.9)], [row("a", 1.0, 0.9, judged=False)]
    assert warnings(2, good, quick=False) == []
    assert len(warnings(2, good, quick=True)) == 1
    assert "1 core" in warnings(1, unclear, quick=False)[0]
    assert "not free" in warnings(2, unclear, quick=False)[0]


def invented_figures() -> dict[str, Any]:
    hydro = Row("gamma law, x", 50.0, 400.0, Spread(8.0, 7.9, 8.1), 5.0, details={"bytes_per_zone": 288})
    block = {"ns_over_order_squared": 1.2, "operations_over_order_squared": 12.2}
    blocks = Row("N = 16", 0.4, 1.2, Spread(3.0, 2.9, 3.1), 4.0, details=block)
    crews = Row("burning", 9, 9, Spread(1.0, 0.9, 1.1), 0.9, False, {"two_processes_over_one": 1.1})
    rows = {"hydro": [hydro], "blocks": [blocks], "threads": [crews]}
    machine = {"triad_memory_gb_s": 16.0, "triad_cache_gb_s": 64.0, "matrix_product_gflop_s": 40.0}
    transport = {"side": 32, "groups": 16, "assemble_ns_per_zone": 700.0, "relax_ns_per_zone": 130.0}
    return {
        "rounds": 9,
        "machine": {"cores": 2, **machine},
        "comparisons": {
            name: {"title": name, "unit": "ns", "against": "numpy", "rows": [one.as_json() for one in found]}
            for name, found in rows.items()
        },
        "transport": {**transport, "relax_bytes_per_zone": 2688},
        "zones": {
            "duration": 1e-5,
            "kinds": [{"temperature": 3e9, "microseconds": 186.0, "sub_steps": 58.7}],
        },
        "requirements": requirements(rows),
        "warnings": ["cores were busy"],
    }


def test_text_says_honestly_what_is_met() -> None:
    lines = kernel_lines(invented_figures())
    text = " ".join(line.strip() for line in lines)
    assert "8.00 (7.90-8.10) 5 met" in text
    assert "3.00 (2.90-3.10) 4 NOT MET" in text
    assert "1.00 (0.90-1.10) 0.9 ?" in text
    assert "1 of 3 met, 1 cannot be told. Not met: factor and solve, 1024 blocks: N = 16: 3.00." in text
    assert "288 bytes a zone of a sweep are 18.0 ns from memory" in text
    assert "Warning: cores were busy" in text


def test_text_fits_a_terminal() -> None:
    assert max(len(line) for line in kernel_lines(invented_figures())) <= 80


@pytest.mark.slow
def test_quick_measurement_from_end_to_end(tmp_path: Path) -> None:
    from breakstep.commands.kernels import kernels

    file = tmp_path / "kernels.json"
    result = CliRunner().invoke(kernels, ["--quick", "--json", str(file)])
    assert result.exit_code == 0, result.output
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    figures = json.loads(file.read_text("utf-8"))
    assert set(figures) == {
        *("quick", "rounds", "machine", "comparisons", "transport", "zones", "requirements", "warnings")
    }
    _check_comparisons(figures)
    _check_zones(figures["zones"]["kinds"])


def _check_comparisons(figures: dict[str, Any]) -> None:
    counts = {name: len(comparison["rows"]) for name, comparison in figures["comparisons"].items()}
    assert counts == {"hydro": 4, "blocks": 3, "burning": 2, "threads": 3}
    for comparison in figures["comparisons"].values():
        for one in comparison["rows"]:
            assert 0.0 < one["ratio"]["low"] <= one["ratio"]["median"] <= one["ratio"]["high"]
    assert len(figures["requirements"]) == 8
    for one in figures["requirements"]:
        assert set(one) == {"what", "ratio", "needed", "met"}
        assert one["met"] is None or one["met"] == (one["ratio"] >= one["needed"])
    for one in figures["comparisons"]["burning"]["rows"]:
        loose, tight = one["bdf_errors"]
        assert tight <= one["error"] < loose


def _check_zones(kinds: list[dict[str, float]]) -> None:
    """Each kind of zone is what it is called: cold, quiet, one sub-step, hot."""
    cold, quiet, single, *hot = kinds
    assert (cold["zones_burned"], cold["zones_quiet"], cold["right_hand_sides"]) == (0.0, 0.0, 0.0)
    assert (quiet["zones_burned"], quiet["zones_quiet"], quiet["sub_steps"]) == (0.0, 1.0, 0.0)
    assert (single["zones_burned"], single["sub_steps"]) == (1.0, 1.0)
    assert all(kind["sub_steps"] > 20.0 for kind in hot)
