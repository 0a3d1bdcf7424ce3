"""What every profile must satisfy, in whole numbers; drawn, random or recorded by a real run."""

from __future__ import annotations

from collections.abc import Iterable
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pandas as pd

from breakstep.profile.causes import WAITS
from breakstep.profile.chain import CHAIN_ACCOUNTS, Chain
from breakstep.profile.factors import Factors
from breakstep.profile.ledger import ACCOUNTS, Ledger
from breakstep.profile.run import Profile

MOST_GAPS = 200  # waits that are explained one by one; a run of the suite seldom has more


def check_exactly(profile: Profile) -> None:
    """Raise AssertionError unless all accounts of a profile add up, to the nanosecond and to the byte."""
    check_accounts(profile.ledger)
    check_kernels(profile)
    check_chain(profile.ledger.chain, profile.ledger)
    check_factors(profile.ledger.factors)
    check_bytes(profile)
    check_why(profile)


def check_recorded(profile: Profile) -> None:
    """The same of a real run; where all its clocks are one, the ideal run must not be longer than the real one."""
    check_exactly(profile)
    if not any(profile.manifest["clock"].get("residual_ns", [1])):
        assert 0 <= profile.ledger.factors.ideal_ns <= profile.ledger.span_ns


def check_accounts(ledger: Ledger) -> None:
    """Threads times span is the sum of accounts; each gap is its parts; root causes are the idle time."""
    assert sum(ledger.accounts_ns.values()) == ledger.threads * ledger.span_ns
    assert ledger.closure_error == 0.0
    assert (ledger.by_thread[list(ACCOUNTS)].sum(axis=1) == ledger.span_ns).all()
    assert (ledger.by_thread >= 0).all(axis=None)
    gaps = ledger.gaps
    length = gaps["end_ns"] - gaps["start_ns"]
    assert (gaps[list(WAITS)].sum(axis=1) == length).all()
    assert (gaps[list(WAITS)] >= 0).all(axis=None)
    assert ledger.waits_by_stage.sum().to_dict() == gaps[list(WAITS)].sum().to_dict()
    for gap in gaps.head(MOST_GAPS).to_dict("records"):
        parts = ledger.explain(gap["task"])
        by_account = parts.groupby("account")["ns"].sum()
        assert {account: int(by_account.get(account, 0)) for account in WAITS} == {a: gap[a] for a in WAITS}


def check_kernels(profile: Profile) -> None:
    """Kernel time is compute and stolen time, and nothing else."""
    accounts = profile.ledger.accounts_ns
    assert accounts["compute"] + accounts["stolen"] == profile.work["compute_ns"].sum()


def check_chain(chain: Chain, ledger: Ledger) -> None:
    """Run, engine and transfer along the critical chain are the span, piece after piece without a hole."""
    assert chain.run_ns + chain.engine_ns + chain.transfer_ns == chain.span_ns == ledger.span_ns
    rows = chain.tasks
    assert (rows[list(CHAIN_ACCOUNTS)] >= 0).all(axis=None)
    assert (rows[list(CHAIN_ACCOUNTS)].sum(axis=1) == rows["end_ns"] - rows["start_ns"]).all()
    assert chain.by_step.sum().to_dict() == chain.accounts_ns
    if len(rows):
        ends = [*rows["end_ns"], ledger.first_ns]
        assert [ledger.last_ns, *rows["start_ns"]] == ends


def check_factors(factors: Factors) -> None:
    """The factors multiply to the parallel efficiency, and none is above 1 but for clocks that disagree."""
    assert factors.busiest_ns <= factors.useful_ns <= factors.threads * factors.busiest_ns
    if not factors.ideal_ns:
        return
    assert factors.busiest_ns <= factors.ideal_ns
    exact = (
        Fraction(factors.useful_ns, factors.threads * factors.busiest_ns),
        Fraction(factors.busiest_ns, factors.ideal_ns),
        Fraction(factors.ideal_ns, factors.span_ns),
    )
    whole = exact[0] * exact[1] * exact[2]
    assert whole == Fraction(factors.useful_ns, factors.threads * factors.span_ns)
    product = factors.load_balance * factors.serialisation * factors.transfer
    # three divisions and two products, each rounded by half a unit of the 53rd bit
    assert abs(product - factors.parallel) <= 5 * 2.0**-53 * max(product, factors.parallel)


def check_bytes(profile: Profile) -> None:
    """However bytes are sorted, they are the same bytes."""
    traffic, moved = profile.traffic, int(profile.transfers["bytes"].sum())
    for sums in (traffic.by_stage, traffic.by_field, traffic.by_workers, traffic.by_tiles):
        assert sum(sums.values()) == moved == traffic.total_bytes
    live = profile.live
    if len(live.total):
        assert live.total.iloc[-1] == 0
        assert live.peak_bytes <= profile.tasks["output_bytes"].sum()
    for parts in (live.by_worker, live.by_kind, live.by_data):
        assert _born(parts.values()) == profile.tasks["output_bytes"].sum()
    assert (profile.demand["bytes"] > 0).all()


def _born(curves: Iterable[pd.Series[int]]) -> int:
    """Everything that was ever added, moment by moment, over some curves."""
    return sum(int(np.maximum(np.diff(curve.to_numpy(), prepend=0), 0).sum()) for curve in curves)


def check_why(profile: Profile) -> None:
    """The longest wait is told in parts that add up, as they are and as they are printed, in 80 columns."""
    found = profile.why()
    gaps = profile.ledger.gaps
    assert found.wait_ns == found.parts["ns"].sum() == max(gaps["end_ns"] - gaps["start_ns"], default=0)
    assert max(map(len, found.lines())) <= 80
    if found.task:
        rows, scale = found.told()
        assert sum(Decimal(time) for time, _, _ in rows) == Decimal(scale.number(found.wait_ns))
