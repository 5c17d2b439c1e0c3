"""The one way in which objects of the kit show themselves in a notebook."""

from labkit.cards.contents import CARDS
from labkit.cards.fragment import html


class Shown:
    """Something that a notebook shows as a card of facts; elsewhere its text stands."""

    def _repr_html_(self) -> str | None:
        """Return the card as HTML, or None, for which a notebook shows the text."""
        kinds = [each.__name__ for each in type(self).__mro__]
        make = next((CARDS[kind] for kind in kinds if kind in CARDS), None)
        try:
            return html(make(self)) if make is not None else None
        except Exception:
            # What cannot be shown nicely is still there: an error here would hide the object.
            return None
