"""Learners beside batch fits of the same messages, from the first thousand to the whole of a log."""
