"""Checks that say whether series are canonical, settled and long enough: one small module each."""
