"""How far a snapshot is from the batch optimum of a log."""
