"""What stands in a paper about a frozen table: the reference, the statement of its data, the legend."""

import hashlib
from pathlib import Path
from typing import Any

from labkit import __version__
from labkit.analysis.rounded_tables import tex_text
from labkit.errors import InputError

CITED = "CITATION.cff"


def legend(query: dict[str, Any]) -> str:
    """Return what the columns of a table mean."""
    measures = query["measures"]
    named = f"{', '.join(measures[:-1])} and {measures[-1]}" if len(measures) > 1 else measures[0]
    text = f"{named}: mean ± standard error over replicates at the {query['moment']}."
    if query["risk"] is not None:
        text += (
            f" headroom: the gap that is exceeded with a probability of at most {100 * query['risk']:g} %, "
            f"with {100 * query['confidence']:g} % limits."
        )
    return text


def statement(facts: dict[str, Any]) -> str:
    """Return the statement of the data for a paper, one line."""
    runs, name = facts["runs"], facts["name"]
    measured = sum(run["rows"] for run in runs)
    text = (
        f"Data: the frozen table {name} ({facts['title']}) has {facts['rows']:,} rows, computed from "
        f"{measured:,} measured rows of {len(runs):,} runs of the study {facts['study']} with labkit "
        f"{__version__} at {commits(facts)}; labkit verify {name} --rerun 3 checks every file of it and "
        "executes the runs behind three of its rows again, to the bit."
    )
    return " ".join(f"{text} {facts['note']}".split()) + "\n"


def commits(facts: dict[str, Any]) -> str:
    """Return the commits at which the runs of a table were recorded, in words."""
    found = dict.fromkeys(run["git_hash"] for run in facts["runs"])
    return " and ".join(f"commit {commit}" if commit else "no commit" for commit in found)


def citation(facts: dict[str, Any], table: bytes, root: Path) -> str:
    """Return the reference in BibTeX's format; author and title are those of the project.

    Parameters
    ----------
    facts : dict
        The manifest's facts.
    table : bytes
        The content of table.parquet.
    root : Path
        The folder of CITATION.cff.

    Raises
    ------
    InputError
        When CITATION.cff is missing or has no title or authors.
    """
    authors, title = _project(root / CITED)
    note = (
        f"Frozen table {facts['name']}: {facts['title']}. Version {__version__}, {commits(facts)}, "
        f"SHA-256 of table.parquet {hashlib.sha256(table).hexdigest()}"
    )
    fields = {
        "author": " and ".join(authors),
        "title": f"{{{tex_text(title)}}}",
        "year": facts["frozen"][:4],
        "note": tex_text(f"{note}. {facts['note']}" if facts["note"] else note),
    }
    lines = [f"  {name} = {{{value}}}" for name, value in fields.items()]
    return f"@misc{{labkit-{facts['name']},\n" + ",\n".join(lines) + "\n}\n"


def _project(path: Path) -> tuple[list[str], str]:
    import yaml

    try:
        content = yaml.safe_load(path.read_text(encoding="utf-8"))
        authors = [_author(each) for each in content["authors"]]
        title = content["title"]
        if not authors or not isinstance(title, str):
            raise ValueError("no title or no authors")
    except (
        OSError,
        ValueError,
        LookupError,
        TypeError,
        AttributeError,
        RecursionError,
        yaml.YAMLError,
    ) as error:
        raise InputError(f"{path} cannot be read as a citation ({error}); restore it.") from None
    return authors, title


def _author(fields: dict[str, str]) -> str:
    if "name" in fields:  # a group: braces keep its name in one piece
        return f"{{{tex_text(fields['name'])}}}"
    names = [fields.get("family-names", ""), fields.get("given-names", "")]
    return ", ".join(tex_text(name) for name in names if name)
