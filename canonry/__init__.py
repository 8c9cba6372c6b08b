"""Assembles: study file, command line, comparison, report."""
