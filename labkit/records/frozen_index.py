"""The index of frozen tables in results/README.md, made from the manifests of their folders."""

import itertools
from pathlib import Path
from typing import Any

from labkit.errors import StoreError
from labkit.records.frozen import SHOWN, Finding, check_files, frozen_names
from labkit.records.store import unwritable

_HEADER = "| frozen table | title | rows | runs | frozen | at commit | manifest |"
_RULE = "| --- | --- | ---: | ---: | --- | --- | --- |"


def index_of(folder: Path) -> Path:
    """Return the file with the index of a folder of frozen tables."""
    return folder.parent / "README.md"


def index_text(folder: Path) -> str:
    """Return the index of the frozen tables in a folder.

    Raises
    ------
    StoreError
        When the manifest of one of them is not as it was written.
    """
    lines = []
    for name in frozen_names(folder):
        manifest, findings = check_files(folder / name)
        wrong = next((each for each in findings if each.kind == "manifest"), None)
        if wrong is not None:
            raise StoreError(f"frozen table {name}: {wrong.sentence}")
        lines.append(index_line(folder, manifest))
    return "".join(f"{line}\n" for line in (_HEADER, _RULE, *lines)) if lines else ""


def index_line(folder: Path, manifest: dict[str, Any]) -> str:
    """Return the line of one frozen table in the index."""
    name = manifest["name"]
    title = " ".join(manifest["title"].split()).replace("\\", "\\\\").replace("|", "\\|")
    commit = manifest["git_hash"][:10] or "none"
    cells = [
        f"[{name}]({folder.name}/{name}/table.md)",
        title,
        f"{manifest['rows']:,}",
        f"{len(manifest['runs']):,}",
        manifest["frozen"][:10],
        f"{commit} with changes" if manifest["dirty"] else commit,
        manifest["digest"][:SHOWN],
    ]
    return f"| {' | '.join(cells)} |"


def write_index(folder: Path) -> Path:
    """Write the index anew, leaving what stands above and below it in its file; return the file.

    Raises
    ------
    StoreError
        When it cannot be written, or a manifest is not as it was written.
    """
    path, table = index_of(folder), index_text(folder)
    try:
        present = path.read_text(encoding="utf-8") if path.is_file() else ""
        above, header, rest = present.partition(_HEADER)
        lines = rest.splitlines() if header else []
        below = "\n".join(itertools.dropwhile(lambda line: not line or line.startswith("|"), lines))
        parts = [part for part in (above.rstrip(), table.rstrip(), below.rstrip()) if part]
        path.write_text("\n\n".join(parts) + "\n", encoding="utf-8", newline="\n")
    except OSError as error:
        raise unwritable("index", path, error) from None
    except UnicodeDecodeError:
        raise StoreError(f"index {path} is no UTF-8 text; restore it.") from None
    return path


def check_index(folder: Path, name: str, manifest: dict[str, Any]) -> list[Finding]:
    """Return what does not hold of the line that the index has of a frozen table."""
    path = index_of(folder)
    if not path.is_file():
        return []
    begin = f"| [{name}]("
    lines = [
        line
        for line in path.read_text(encoding="utf-8", errors="replace").splitlines()
        if line.startswith(begin)
    ]
    where = f"{folder.parent.name}/{path.name}"
    if not lines:
        sentence = f"{where} does not list the frozen table {name}; restore its line."
        return [Finding("index", path.name, sentence)]
    expected = index_line(folder, manifest)
    if lines == [expected]:
        return []
    found = lines[0].rstrip(" |").rpartition("| ")[2]
    sentence = (
        f"{where} lists the frozen table {name} with manifest {found}, and its manifest is "
        f"{manifest['digest'][:SHOWN]}; restore whichever was changed."
    )
    if found == manifest["digest"][:SHOWN]:
        sentence = (
            f"{where} lists the frozen table {name} otherwise than its manifest does; restore its line."
        )
    return [Finding("index", path.name, sentence)]
