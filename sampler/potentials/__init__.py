"""Pair potentials, one small module each: u, w, x, tail, source."""
