"""Journal and outbox in one SQLite file; evidence pictures."""
