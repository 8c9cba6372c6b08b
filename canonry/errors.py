"""What a user can get wrong."""

from __future__ import annotations

__all__ = ["UserError"]


class UserError(ValueError):
    """A request that cannot be met as written.

    The text is one paragraph: the file, the key, the value found and what would be accepted.
    """
