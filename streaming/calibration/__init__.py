"""Trials of the stopping rule on random processes whose modes are known."""
