"""Machines: described computers on which a recorded program is played.

A machine is a TOML file; ``profiles/machines/`` holds some. They are invented or generic, and figures that are common
practice rather than anybody's measurement are listed as such in the file itself. This module reads and checks
them; what a figure does to a run is said elsewhere.
"""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from breakstep.errors import MachineError

SUFFIX = ".toml"
RECORDED = "recorded"  # the machine that the profile was recorded on

# Times are whole nanoseconds in 64 bits, sizes whole bytes: within these limits no run that is recorded overflows them.
Positive = Annotated[float, Field(ge=1e-6, le=1e6)]
Share = Annotated[float, Field(ge=0.0, le=10.0)]
Micros = Annotated[float, Field(ge=0.0, le=1e9)]
Count = Annotated[int, Field(ge=1, le=100_000_000)]


class Section(BaseModel):
    """Base of all tables: no unknown keys, no silent conversions, finite numbers."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


class Network(Section):
    """``[network]``: what carries messages between nodes, and between workers of one node."""

    latency_us: Micros = Field(description="one way, between nodes [us]")
    bandwidth_gbytes: Positive = Field(description="into one worker [GB/s]")
    local_latency_us: Micros = Field(default=1.0, description="one way, between workers of one node [us]")
    local_bandwidth_gbytes: Positive = Field(default=8.0, description="between workers of one node [GB/s]")
    contention: bool = Field(default=True, description="whether messages to one worker queue for its link")


class Runtime(Section):
    """``[runtime]``: what carries out tasks there. Figures left out are those of the profile's own dispatch."""

    kind: Literal["recorded", "resident", "native", "compiled"] = Field(
        default="recorded", description="a dispatch of ours, or a runtime that is compiled"
    )
    overhead_us: Micros | None = Field(default=None, description="between two ready tasks of a thread [us]")
    message_us: Micros | None = Field(default=None, description="software's part of a message's way [us]")
    arity: Annotated[int, Field(ge=2, le=1024)] = Field(default=8, description="children in trees of workers")


class Machine(Section):
    """One machine.

    A worker is a process; its threads share memory. Workers are dealt out to nodes evenly.
    """

    name: Annotated[str, Field(pattern=r"^[a-z][a-z0-9_]*$", max_length=60)]
    title: Annotated[str, Field(min_length=1, max_length=200)]
    nodes: Count = Field(default=1, description="nodes")
    cores: Annotated[int, Field(ge=1, le=4096)] = Field(description="cores of a node")
    threads: Annotated[int, Field(ge=1, le=4096)] = Field(default=1, description="threads of a worker")
    memory_gbytes: Positive | None = Field(default=None, description="memory of a node [GB]")
    speed: Positive = Field(default=1.0, description="of a core, over that of the machine of recording")
    crowding: Share | None = Field(
        default=None, description="how much slower kernels are on a full node, less 1; the profile's own if left out"
    )
    network: Network
    runtime: Runtime = Runtime()
    common_practice: tuple[str, ...] = Field(default=(), description="keys whose figures are common practice")

    @model_validator(mode="before")
    @classmethod
    def _lists(cls, values: Any) -> Any:
        if isinstance(values, dict) and isinstance(values.get("common_practice"), list):
            return {**values, "common_practice": tuple(values["common_practice"])}
        return values

    @property
    def slots(self) -> int:
        """Cores of all nodes."""
        return self.nodes * self.cores

    def nodes_for(self, workers: int, threads: int) -> int:
        """Nodes that so many workers fill, one after the other."""
        return min(self.nodes, max(1, -(-workers * threads // self.cores)))


def library() -> Path:
    """The folder of machines that come with the package: beside this module in a wheel, else in the clone."""
    inside = Path(__file__).parent / "machine_files"
    return inside if inside.is_dir() else Path(__file__).parents[3] / "profiles" / "machines"


def shipped() -> dict[str, Path]:
    """Machines that come with the package, by name."""
    return {path.stem: path for path in sorted(library().glob(f"*{SUFFIX}"))}


def load_machine(name_or_path: str) -> Machine:
    """Read and check a machine, by the name of one that comes with the package or by path.

    Raises
    ------
    MachineError
        There is none, or all its faults together.
    """
    path = _find(name_or_path)
    try:
        tables = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise MachineError(f"{path}: cannot be read as TOML ({error}); correct the file") from error
    return machine_from(tables, str(path))


def machine_from(tables: Any, source: str) -> Machine:
    """Check the tables of a machine.

    Raises
    ------
    MachineError
        All faults together, one on a line.
    """
    try:
        machine = Machine.model_validate(tables)
    except ValidationError as error:
        raise _refusal([f"{source}: {_where(one)}: {_expected(one)}" for one in error.errors()]) from error
    unknown = [key for key in machine.common_practice if not _holds(tables, key)]
    if unknown:
        raise _refusal(
            [f"{source}: common_practice: {key} is no key of this file; name keys like network.latency_us"
             for key in unknown]
        )  # fmt: skip
    return machine


def _refusal(faults: list[str]) -> MachineError:
    return MachineError("\n".join(faults), faults=faults)


def _where(error: Any) -> str:
    return ".".join(str(part) for part in error["loc"]) or "the file"


def _expected(error: Any) -> str:
    message = str(error["msg"])
    if error["type"] == "missing":
        return "expected a value, the key is missing; add it"
    if error["type"] == "extra_forbidden":
        return "no such key; take it out, or correct its spelling"
    return f"{message[:1].lower()}{message[1:]}, came {str(error.get('input'))[:60]}"


def _holds(tables: Any, key: str) -> bool:
    for part in key.split("."):
        if not isinstance(tables, dict) or part not in tables:
            return False
        tables = tables[part]
    return True


def _find(name_or_path: str) -> Path:
    path = Path(name_or_path).expanduser()
    if name_or_path.endswith(SUFFIX) or "/" in name_or_path:
        if path.is_file():
            return path
        raise MachineError(f"{name_or_path}: expected a machine's file, there is none; check the path")
    known = shipped()
    if name_or_path in known:
        return known[name_or_path]
    raise MachineError(
        f"no machine is named {name_or_path!r}; known: {', '.join([RECORDED, *known])}"
        f" (a file is given by a path that ends in {SUFFIX})"
    )
