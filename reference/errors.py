"""What a reference refuses. Every error is ours and the built-in kind."""

__all__ = ["AboveCritical", "NotConverged", "OutOfRange", "ReferenceRefusal", "UnknownProperty", "UnknownReference"]


class ReferenceRefusal(Exception):
    """Anything a reference does not answer."""


class UnknownReference(ReferenceRefusal, ValueError):
    """No reference goes by that name."""


class UnknownProperty(ReferenceRefusal, ValueError):
    """A reference does not give that property."""


class OutOfRange(ReferenceRefusal, ValueError):
    """A state or condition for which the source makes no statement."""


class AboveCritical(OutOfRange):
    """No liquid and vapour coexist at that temperature."""


class NotConverged(ReferenceRefusal, ArithmeticError):
    """A numerical answer that does not reach its accuracy."""
