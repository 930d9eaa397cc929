"""Choosing the strength: a log in, many settings tried side by side, a choice and a report out."""
