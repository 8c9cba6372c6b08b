"""Draws: from a state to stored series and frames."""
