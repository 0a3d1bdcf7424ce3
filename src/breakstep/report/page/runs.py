"""Which runs a page is about: the folders named on the command line, told apart and put into pairs."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from breakstep.errors import PairsError, ProfileError
from breakstep.profile.run import Profile
from breakstep.profile.store import profiles_in, read_profile
from breakstep.report.comparison import Comparison, first_difference

#: Names that ``compare`` gives to the folders of its runs.
_NUMBERED = re.compile(r"(lockstep|tasked)-(\d+)$")


@dataclass(frozen=True)
class Runs:
    """What a page shows.

    Attributes
    ----------
    lockstep, tasked : Profile or None
        A run with barriers and one without; at least one of them is there. Of several pairs, that with the
        median gain.
    comparison : Comparison or None
        All pairs; None where there is no pair.
    """

    lockstep: Profile | None
    tasked: Profile | None
    comparison: Comparison | None = None

    @property
    def sides(self) -> dict[str, Profile]:
        """The runs that are there, under ``lockstep`` and ``tasked``."""
        both = {"lockstep": self.lockstep, "tasked": self.tasked}
        return {side: profile for side, profile in both.items() if profile is not None}

    @property
    def either(self) -> Profile:
        """The lockstep run, or the tasked one where that is alone."""
        return next(iter(self.sides.values()))


def read_runs(folders: Sequence[Path]) -> Runs:
    """Read the profiles of folders, each a profile or a folder of a comparison's profiles.

    Raises
    ------
    ProfileError
        A folder holds no profile, or one that cannot be read.
    PairsError
        The runs are no pairs of one scenario on one mesh.
    """
    sides: dict[str, list[Profile]] = {"lockstep": [], "tasked": []}
    for folder in folders:
        for place in _profiles(folder):
            profile = read_profile(place, check_digests=False)
            sides[_side(profile, place)].append(profile)
    return runs_of(sides["lockstep"], sides["tasked"])


def runs_of(lockstep: Sequence[Profile], tasked: Sequence[Profile]) -> Runs:
    """The runs that a page shows, from those with barriers and those without.

    Raises
    ------
    PairsError
        The runs are no pairs of one scenario on one mesh.
    """
    _check(lockstep, tasked)
    if not lockstep or not tasked:
        return Runs(next(iter(lockstep), None), next(iter(tasked), None))
    differences = [first_difference(lockstep[0], other) for other in [*lockstep[1:], *tasked]]
    found = next((difference for difference in differences if difference is not None), None)
    comparison = Comparison(lockstep, tasked, found)
    return Runs(*comparison.shown, comparison)


def _profiles(folder: Path) -> list[Path]:
    """The profile itself, or a comparison's runs by the number of their pair; traced second runs are left out."""
    inside = profiles_in(folder)
    if inside in ([folder], []):
        return [folder]
    numbered = [place for place in inside if _NUMBERED.search(place.name)]
    return sorted(numbered or inside, key=_number)


def _number(place: Path) -> int:
    found = _NUMBERED.search(place.name)
    return int(found.group(2)) if found else 0


def _side(profile: Profile, place: Path) -> str:
    """The side of a run: what it is among its pair, or what its barriers make it."""
    found = _NUMBERED.search(place.name)
    if found:
        return found.group(1)
    return "lockstep" if profile.manifest["barriers"] else "tasked"


def _check(lockstep: Sequence[Profile], tasked: Sequence[Profile]) -> None:
    everything = [*lockstep, *tasked]
    for profile in everything:
        if not len(profile.tasks):
            raise ProfileError(f"{profile.folder}: the profile holds no task; record a run that gets further")
    if lockstep and tasked and len(lockstep) != len(tasked):
        raise PairsError(
            f"a page needs as many runs in lockstep as tasked, not {len(lockstep)} and {len(tasked)}; name one of"
            " each, or the folder that a comparison left"
        )
    if len(everything) > 1 and not (lockstep and tasked):
        side = "in lockstep" if lockstep else "tasked"
        raise PairsError(f"all {len(everything)} runs are {side}; name a run of each way, or one run alone")
    if len({_what(profile) for profile in everything}) > 1:
        names = sorted({str(profile.folder) for profile in everything})
        raise PairsError(f"{', '.join(names)}: the runs are of different scenarios or meshes; name runs of one")


def _what(profile: Profile) -> tuple[str, str]:
    return str(profile.manifest["scenario"].get("name", "")), str(profile.manifest["mesh"])
