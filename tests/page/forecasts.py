"""Figures of forecasts, invented, in the shape that the page takes."""

from __future__ import annotations

from typing import Any

_TIMES = ((1, 9.2, 9.1), (2, 5.2, 4.8), (4, 3.1, 2.6), (8, 2.3, 1.7), (16, 2.0, 1.3))
FORECAST: dict[str, Any] = {
    "scaling": {
        "machine": "workers like the recorded one",
        "rows": [
            {
                "workers": workers,
                "lockstep_s": lockstep, "lockstep_low_s": 0.93 * lockstep, "lockstep_high_s": 1.07 * lockstep,
                "tasked_s": tasked, "tasked_low_s": 0.95 * tasked, "tasked_high_s": 1.05 * tasked,
                "area_bound_s": 9.0 / workers, "path_bound_s": 1.1, "least_s": max(9.0 / workers, 1.1),
            }
            for workers, lockstep, tasked in _TIMES
        ],
        "recorded": {
            "lockstep": {"measured_s": 5.1, "forecast_s": 5.2, "error": 0.0196},
            "tasked": {"measured_s": 4.9, "forecast_s": 4.8, "error": 0.0204},
        },
    },
    "barriers": {
        "ranking": [
            {"what": "burn", "alone_s": 0.31, "in_order_s": 0.31, "share_s": 0.27},
            {"what": "sweep_x", "alone_s": 0.04, "in_order_s": 0.05, "share_s": 0.07},
            {"what": "dt", "alone_s": 0.0, "in_order_s": 0.05, "share_s": 0.07},
        ],
        "tie": {},
    },
    "grain": {
        "recorded_tile": [32, 32, 1],
        "rows": [
            {
                "tile": [edge, edge, 1], "tasks": tasks, "lockstep_s": lockstep, "tasked_s": tasked,
                "compute_s": 3.0, "engine_s": engine, "wait_s": tasked - 3.0 - engine,
            }
            for edge, tasks, lockstep, tasked, engine in (
                (8, 6400, 7.9, 7.0, 3.6), (16, 1600, 5.6, 4.9, 1.0), (32, 400, 5.2, 4.8, 0.3), (64, 100, 6.8, 6.5, 0.1),
            )
        ],
    },
    "advice": [
        {
            "do": "Take out the barrier behind burn", "gain_s": 0.31, "bytes": 0, "memory_bytes": 1_200_000,
            "command": "breakstep compare single_spark --barriers burn",
        },
        {"do": "Use tiles of 16 x 16 zones", "gain_s": 0.1, "low_s": -0.05, "high_s": 0.25,
         "bytes": 40_000, "memory_bytes": -2000, "command": ""},
    ],
}  # fmt: skip
