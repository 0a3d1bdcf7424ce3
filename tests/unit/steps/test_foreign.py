"""Compiled routines: how arguments go in, what a routine in place can reach, and what is said of faults."""

from __future__ import annotations

import pickle
import threading
from pathlib import Path

import numpy as np
import pytest

from breakstep import api
from breakstep.errors import DeclarationError
from breakstep.kernels.compiled import compiled
from breakstep.mesh.halo import Array
from breakstep.scenario import load_scenario
from breakstep.steps.foreign import InPlace, Library
from breakstep.steps.step import Call
from tests.compilers import built, example

ROUTINES = """
#include <unistd.h>
double dot(const double *a, const double *b, int n) {
    double s = 0; for (int i = 0; i < n; i++) s += a[i] * b[i]; return s; }
void by_address(double *a, const int *n, const double *x) { for (int i = 0; i < *n; i++) a[i] *= *x; }
int fails(double *a) { a[0] = -1; return 7; }
void rest(int milliseconds) { usleep(1000 * milliseconds); }
void trailing_(void) { }
void everywhere(double *a, double *b, int n) { for (int i = 0; i < n; i++) { a[i] += 1; b[i] = -5; } }
"""


@pytest.fixture
def library(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Library:
    """The routines above, compiled in the test's own folder."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    return built(ROUTINES, tmp_path)


def call_of(*shape: int) -> Call:
    """A call on a tile of so many zones."""
    x, y, z = (*shape, 1, 1, 1)[:3]
    return Call("s", 0, -1, 0, (0, 0, 0), (x, y, z), (1.0, 1.0, 1.0), (True, True, True), {})


def test_arrays_and_numbers_go_in_as_they_are(library: Library) -> None:
    a, b = np.arange(6.0), np.full(6, 2.0)
    assert library.routine("dot", returns="double")(a, b, 6) == 30.0
    library.routine("by_address", by_reference=True)(a, 6, 0.5)
    assert a.tolist() == [0.0, 0.5, 1.0, 1.5, 2.0, 2.5]


def test_other_threads_run_meanwhile(library: Library) -> None:
    """Two waits of a quarter second in a row would take half of one; side by side a thread counts through both."""
    counted = 0
    routine = library.routine("rest")
    other = threading.Thread(target=routine, args=(250,))
    other.start()
    while other.is_alive():
        counted += 1
    assert counted > 1000  # with the lock held, not one turn would be made


@pytest.mark.parametrize(
    ("argument", "sentence"),
    [
        (np.zeros(3, np.float32), "argument 1 of rest: expected float64 or int32 in one piece of memory, came float32"),
        (np.zeros((4, 4))[:, ::2], "came float64 (4, 2) with gaps"),
        ("three", "argument 1 of rest: expected an array or a number, came str"),
        (2**40, "1099511627776 does not fit an int"),
    ],
)
def test_what_cannot_be_passed(library: Library, argument: object, sentence: str) -> None:
    with pytest.raises(TypeError) as caught:
        library.routine("rest")(argument)  # type: ignore[arg-type]
    assert sentence in str(caught.value)


def test_libraries_and_functions_that_are_not_there(library: Library, tmp_path: Path) -> None:
    with pytest.raises(DeclarationError, match=r"there is no library .*nowhere\.so; compile it first"):
        Library(str(tmp_path / "nowhere.so"))
    with pytest.raises(DeclarationError, match=r"offers no function 'nothing'; C\+\+ needs extern"):
        library.routine("nothing")
    with pytest.raises(DeclarationError, match="offers no function 'TRAILING'; it offers 'trailing_'"):
        library.routine("TRAILING")
    text = tmp_path / "text.so"
    text.write_text("no library", encoding="utf-8")
    with pytest.raises(DeclarationError, match=r"text\.so cannot be loaded here"):
        Library(str(text))


def test_another_library_of_the_same_name_is_refused(library: Library) -> None:
    """As on a worker that sees other files: here a library declared with another digest."""
    path = Path(library.path)
    with pytest.raises(DeclarationError, match="is not the one that the problem was declared with"):
        Library(str(path), digest="0" * 64)


def test_a_source_that_does_not_compile(library: Library, tmp_path: Path) -> None:
    with pytest.raises(DeclarationError, match=r"routines\.c does not compile with cc") as caught:
        built("int broken( {", tmp_path)
    assert "error:" in caught.value.details["traceback"]
    with pytest.raises(DeclarationError, match="the compiler 'no-such-compiler' cannot be started"):
        Library.build(tmp_path / "routines.c", "no-such-compiler")


def everything(blocks: dict[str, Array], call: Call) -> tuple[object, ...]:
    """Arguments of ``everywhere``."""
    return blocks["u"], blocks["k"], blocks["u"].size


def test_a_routine_in_place_reaches_nothing_of_the_run_s(library: Library) -> None:
    u, k = np.ones((1, 5, 4, 1)), np.ones((1, 5, 4, 1))
    for array in (u, k):
        array.flags.writeable = False
    kernel = pickle.loads(pickle.dumps(InPlace(library.routine("everywhere"), everything, ("u",))))
    made = kernel({"u": u, "k": k}, call_of(3, 2))
    assert made["u"].shape == (1, 3, 2, 1)
    assert np.all(made["u"] == 2.0)
    assert np.all(u == 1.0)
    assert np.all(k == 1.0)


def first(blocks: dict[str, Array], call: Call) -> tuple[object, ...]:
    """Arguments of ``fails``."""
    return (blocks["u"],)


def test_a_routine_that_says_it_failed(library: Library) -> None:
    with pytest.raises(RuntimeError, match="the routine fails returned 7"):
        InPlace(library.routine("fails", returns="int"), first, ("u",))({"u": np.ones((1, 3, 1, 1))}, call_of(3))


@pytest.mark.parametrize(("updates", "shared"), [(("w",), ()), (("u",), ("u",))])
def test_what_is_updated_must_be_read_and_copied(
    library: Library, updates: tuple[str, ...], shared: tuple[str, ...]
) -> None:
    with pytest.raises(TypeError, match="which the step must read, and not as shared"):
        InPlace(library.routine("fails"), first, updates, shared)({"u": np.ones((1, 3, 1, 1))}, call_of(3))


@compiled
def conduct(u: Array, share: float) -> Array:
    """What the compiled examples do, from old to new."""
    new = np.empty((1, u.shape[1] - 2, u.shape[2] - 2, 1))
    for i in range(1, u.shape[1] - 1):
        for j in range(1, u.shape[2] - 1):
            a, low, high, left, right = (
                u[0, i, j, 0],
                u[0, i - 1, j, 0],
                u[0, i + 1, j, 0],
                u[0, i, j - 1, 0],
                u[0, i, j + 1, 0],
            )
            x = np.sqrt(0.5 * (a + high)) * (high - a) - np.sqrt(0.5 * (low + a)) * (a - low)
            y = np.sqrt(0.5 * (a + right)) * (right - a) - np.sqrt(0.5 * (left + a)) * (a - left)
            new[0, i - 1, j - 1, 0] = a + share * (x + y)
    return new


class Conduct:
    """The numba kernel in place of the compiled one; the share of dt as the examples have it."""

    def __call__(self, arrays: dict[str, Array], call: Call) -> dict[str, Array]:
        return {"warmth": conduct(arrays["warmth"], 0.03 * call.dt / call.widths[0] ** 2)}


@pytest.mark.parametrize("name", ["heat_c", "heat_fortran"])
def test_the_compiled_examples_agree_with_numba(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Twenty cycles round each zone some 300 times, by 1.1e-16 of a value each: 1e-13 is three times their sum."""
    from dataclasses import replace

    from breakstep.scenario.setup import Setup
    from breakstep.steps.splitting import lie

    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.chdir(tmp_path)
    file = example(name)
    theirs = api.run(file, dispatch="serial", overrides=["code.arguments.zones=[32, 32]"])
    problem = load_scenario(file, ["code.arguments.zones=[32, 32]"]).problem()
    conducting, cooling = problem.splitting.orders[0]
    splitting = lie([replace(conducting, kernel=Conduct()), cooling], problem.splitting.reductions)
    ours = api.run(Setup(replace(problem, splitting=splitting), (8, 8)), dispatch="serial")
    difference = np.abs(theirs.fields["warmth"].values / ours.fields["warmth"].values - 1.0).max()
    assert difference <= 1e-13
    assert float(ours.fields["warmth"].std()) > 100.0  # there is something to conduct
