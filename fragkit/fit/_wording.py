"""Wording shared by the messages of the strategies."""


def counted(number: int, noun: str) -> str:
    """A number with its noun in the right form.

    >>> counted(1, "fragment"), counted(12, "fragment")
    ('1 fragment', '12 fragments')
    """
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
