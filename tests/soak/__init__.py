"""A worker that lives on a topic of a real broker for many messages: `python -m tests.soak --help`."""
