"""What goes wrong, in words a user can act on."""


class InputError(ValueError):
    """Input that is refused at the door: one sentence says what, why and what to do."""


class TooFewReplicates(InputError):
    """The asked risk and confidence need more replicates than the table holds."""


class StoreError(InputError):
    """The results store cannot be written, or holds a torn or altered file."""


class NotStationary(InputError):
    """A gap that cannot be called stationary, because chains from different starts disagree."""


class HeadroomExceeded(ValueError):
    """The headroom that a rule needs lies above the highest that the user allows."""
