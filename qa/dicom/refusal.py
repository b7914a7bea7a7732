"""How this room says, inside itself, that a file is not taken in."""

__all__ = ["RefusalError"]


class RefusalError(Exception):
    """A file is not taken in; `str()` of it is the plain reason, free of any person's name, number or date."""
