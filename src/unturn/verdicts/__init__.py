"""Verdicts on results: what was tested, what was found, and how that is told to people and build servers."""
