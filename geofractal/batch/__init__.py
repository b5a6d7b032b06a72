"""Plan, parts, executor, commit and run record."""
