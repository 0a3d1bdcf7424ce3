"""Figures for the report page: scaling, what barriers are worth, the grain, advice.

Plain dictionaries; nothing here draws.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from breakstep.errors import ProfileError
from breakstep.forecast.advice import Adviser, command_of
from breakstep.forecast.answer import answer, recorded_errors
from breakstep.forecast.basis import Basis, basis_of
from breakstep.forecast.grain import grain_rows, recorded_tile
from breakstep.forecast.machines import Machine
from breakstep.forecast.question import Question
from breakstep.forecast.ranking import Ranking, rank_kinds
from breakstep.forecast.setting import recorded_machine
from breakstep.profile.run import Profile

PAGE_WORKERS = 6  # numbers of workers that the page's scaling shows at most


def ranking_figures(ranking: Ranking) -> dict[str, Any]:
    """The ranking and the tie."""
    return {"ranking": ranking.rows(), "tie": ranking.tie()}


def advice_figures(
    basis: Basis, machine: Machine, question: Question, workers: int, ranking: Ranking, common: Sequence[str] = ()
) -> list[dict[str, Any]]:
    """Advice as plain figures, each with its command.

    Parameters
    ----------
    common : sequence of str
        Overrides by which the recorded run differed from its scenario; every command repeats them.
    """
    adviser = Adviser(basis, machine, question, workers, tuple(common))
    threads = question.threads or machine.threads
    return [one.facts(command_of(one, basis, workers, threads)) for one in adviser.advice(ranking)]


def scenario_name(basis: Basis) -> str:
    """What the recorded scenario is called."""
    return str(basis.first.profile.manifest["scenario"].get("name", "SCENARIO"))


def page_forecast(lockstep: Profile | None, tasked: Profile | None) -> dict[str, Any]:
    """All that the report page shows of a forecast on the machine of recording.

    Empty where nothing can be forecast from the runs: none is given, one did not complete, or they are of two
    programs. A page shows such runs all the same.
    """
    given = [profile for profile in (lockstep, tasked) if profile is not None]
    if not given:
        return {}
    try:
        basis = basis_of(given)
    except ProfileError:
        return {}
    machine, question, workers = recorded_machine(basis.first), Question(), basis.first.workers
    more = _more_nodes(machine, _page_workers(basis))
    scaling = answer(basis, more, question, _page_workers(basis))
    ranking = rank_kinds(basis, machine, question, workers)
    return {
        "scaling": {"machine": more.title, "rows": scaling["rows"], "recorded": recorded_errors(basis)},
        "barriers": ranking_figures(ranking),
        "grain": {
            "recorded_tile": list(recorded_tile(basis)),
            "rows": grain_rows(basis, machine, question, workers),
        },
        "advice": advice_figures(basis, machine, question, workers, ranking),
    }


def _more_nodes(machine: Machine, workers: Sequence[int]) -> Machine:
    """As many nodes like the machine of recording as that many workers need; messages take as long as recorded."""
    nodes = -(-max(workers) * machine.threads // machine.cores)
    if nodes <= 1:
        return machine
    return machine.model_copy(update={"nodes": nodes, "title": f"{machine.title}; beyond them, more nodes like it"})


def _page_workers(basis: Basis) -> list[int]:
    """Doubling from one worker towards one tile a worker."""
    tiles = basis.program.tile_count
    doubling = [2**power for power in range(tiles.bit_length()) if 2**power <= tiles]
    return sorted({*doubling[:PAGE_WORKERS], basis.first.workers})
