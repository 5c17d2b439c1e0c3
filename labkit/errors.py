"""What goes wrong, in words a user can act on."""

# Characters of a refusal.
LONGEST = 2_000


class InputError(ValueError):
    """Input that is refused at the door: one sentence says what, why and what to do.

    It names what was received; of a sentence that this makes absurdly long the middle is left out.
    """

    def __init__(self, sentence: str = "") -> None:
        if len(sentence) > LONGEST:
            sentence = f"{sentence[: LONGEST // 2]} … {sentence[-LONGEST // 4 :]}"
        super().__init__(sentence)


class TooFewReplicates(InputError):
    """The asked risk and confidence need more replicates than the table holds."""


class StoreError(InputError):
    """The results store cannot be written, or holds a torn or altered file."""


class StoreUnwritable(StoreError):
    """No record can be written at all: a full disk, a folder that is read-only or no folder."""


class SchedulerLost(RuntimeError):
    """The scheduler of a cluster does not answer (any more)."""


class NotStationary(InputError):
    """A gap that cannot be called stationary, because chains from different starts disagree."""


class HeadroomExceeded(ValueError):
    """The headroom that a rule needs lies above the highest that the user allows."""
