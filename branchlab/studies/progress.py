"""Telling how far a study has come, to a receiver that may raise to cancel."""


class Progress:
    """Hands on the fraction done, and remembers that the receiver raised to cancel."""

    def __init__(self, receiver):
        self.receiver = receiver
        self.cancelled = False

    def part(self, start: float, share: float):
        """Return the progress of a part of the work."""

        def told(fraction):
            try:
                self.receiver(start + share * fraction)
            except BaseException:
                self.cancelled = True
                raise

        return None if self.receiver is None else told


def tell(progress) -> None:
    """Report that a stage is done."""
    if progress is not None:
        progress(1.0)
