"""Every profile that a real run of the suite leaves is checked here, in whole numbers, whatever its test asks."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from breakstep.engine import recorded
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.exact import check_recorded


@pytest.fixture(autouse=True)
def recorded_profiles(monkeypatch: pytest.MonkeyPatch) -> Iterator[list[Profile]]:
    """Note what runs write, and check it once the test is over; interrupted and failed runs as well."""
    written: list[Profile] = []
    write = recorded.write_profile

    def noted(record: RunRecord, folder: Path, **options: Any) -> Profile:
        profile = write(record, folder, **options)
        written.append(profile)
        return profile

    monkeypatch.setattr(recorded, "write_profile", noted)
    yield written
    for profile in written:
        check_recorded(profile)
