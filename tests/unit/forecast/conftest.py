"""The command line as the tests of commands have it."""

from tests.unit.commands.conftest import breakstep

__all__ = ["breakstep"]
