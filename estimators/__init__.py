"""Estimates: from series to values with error bars that hold."""
