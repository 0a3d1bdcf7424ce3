"""The audit: what each step truly reads and writes, found by running it alone; nothing here believes a declaration."""
