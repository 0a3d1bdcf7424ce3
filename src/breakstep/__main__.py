"""``python -m breakstep``."""

from breakstep.cli import main

main()
