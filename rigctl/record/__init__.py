"""The record of a session: one SQLite file, event-sourced, chained, closed."""

RECORD_VERSION = 1
