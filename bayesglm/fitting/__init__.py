"""The fit of a cell, from recordings to verdict: the steps in order, each in its own module."""
