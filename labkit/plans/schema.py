"""The header of a plan, checked against the JSON Schema that stands beside this file."""

import hashlib
import json
from functools import lru_cache
from pathlib import Path
from typing import Any

VERSION = 1
FILE = Path(__file__).with_name("plan.schema.json")


@lru_cache(maxsize=1)
def validator() -> Any:
    """Return the validator of headers, JSON Schema draft 2020-12."""
    from jsonschema import Draft202012Validator

    schema = json.loads(FILE.read_bytes())
    Draft202012Validator.check_schema(schema)
    return Draft202012Validator(schema)


def fault_of(header: Any) -> str | None:
    """Return where and how a header violates the schema, in one clause, or None when it does not."""
    from jsonschema.exceptions import best_match

    fault = best_match(validator().iter_errors(header))
    if fault is None:
        return None
    words = " ".join(fault.message.split())
    return f"{fault.json_path.removeprefix('$.')}: {words if len(words) <= 200 else words[:197] + '...'}"


def header_digest(header: dict[str, Any]) -> str:
    """Return the SHA-256, in hex, of a header without its own digest: of its JSON with sorted keys."""
    rest = {key: value for key, value in header.items() if key != "digest"}
    text = json.dumps(rest, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()
