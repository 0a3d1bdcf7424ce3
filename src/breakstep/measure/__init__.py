"""The tool measuring itself: its kernels against the machine and against other ways of computing the same."""
