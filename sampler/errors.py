"""What can go wrong while sampling. Every one is ours and the built-in kind."""

__all__ = ["BadRequest", "DamagedSegment", "DivergedRun", "ForeignDirectory", "SamplerError"]


class SamplerError(Exception):
    """Anything the sampler refuses or could not finish."""


class BadRequest(SamplerError, ValueError):
    """A fluid, state or protocol that cannot be sampled as asked."""


class DamagedSegment(SamplerError, OSError):
    """A segment file that cannot be read back whole."""


class DivergedRun(SamplerError, ArithmeticError):
    """A trajectory whose energy is no longer a finite number."""


class ForeignDirectory(SamplerError, ValueError):
    """A directory that holds samples of something else."""
