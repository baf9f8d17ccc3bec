"""Existing files as snapshots: readers of common formats, arranged as a run declares them, and posted."""
