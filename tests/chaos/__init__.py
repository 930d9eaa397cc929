"""A worker on a real broker that is killed again and again: `python -m tests.chaos --help` (`make chaos`).

`places` has where a worker can be killed, `worker` the process that is, `feeding` the feed and what is true
of it, `series` the kills, `oracles` what must hold afterwards.
"""
