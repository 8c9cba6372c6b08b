"""What can go wrong while estimating. Every one is ours and the built-in kind."""

__all__ = ["BadSeries", "EstimatorsError", "NotSolved"]


class EstimatorsError(Exception):
    """Anything the estimators refuse or could not finish."""


class BadSeries(EstimatorsError, ValueError):
    """Series that cannot be estimated from: empty, not finite, or of different states."""


class NotSolved(EstimatorsError, ArithmeticError):
    """Equations whose solution was not found to the accuracy that error bars need."""
