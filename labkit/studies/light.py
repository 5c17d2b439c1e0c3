"""A second off the start: notebooks' libraries imported without a grammar that they never use.

jsonschema offers to check international web addresses; building its parser takes about a second on import.
No notebook schema asks for that check, and jsonschema goes without when the grammar cannot be imported.
"""

import sys
from typing import Any

_GRAMMAR = "rfc3987_syntax"


def import_jsonschema() -> None:
    """Import jsonschema, before anything else imports it, without its slowest optional part."""
    if "jsonschema" in sys.modules or _GRAMMAR in sys.modules:
        return
    modules: dict[str, Any] = sys.modules
    modules[_GRAMMAR] = None
    try:
        import jsonschema  # noqa: F401
    finally:
        del modules[_GRAMMAR]
