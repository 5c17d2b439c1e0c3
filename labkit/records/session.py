"""What a notebook session executed so far, as IPython remembers it."""

import ast
from collections.abc import Mapping
from typing import Any

from labkit.errors import InputError
from labkit.records.declared import Notebook


def executed_cells(namespace: Mapping[str, Any]) -> list[str] | None:
    """Return the inputs executed so far, the present one last, or None outside IPython."""
    shell = namespace.get("get_ipython")
    if not callable(shell):
        return None
    history = getattr(shell(), "history_manager", None)
    if history is None:
        return None
    return [text.strip() for text in history.input_hist_raw if text.strip()]


def is_injected(cell: str) -> bool:
    """Tell whether papermill put this cell in."""
    return cell.startswith("# Parameters\n")


def injected_names(executed: list[str]) -> list[str]:
    """Return the names that papermill's own cells assigned."""
    names = []
    for cell in filter(is_injected, executed):
        for statement in ast.parse(cell).body:
            if isinstance(statement, ast.Assign):
                names += [target.id for target in statement.targets if isinstance(target, ast.Name)]
    return names


def check_session(notebook: Notebook, executed: list[str]) -> None:
    """Refuse a session whose last cells are not the saved notebook's from the first to the present one.

    The record names the saved notebook, so only what is saved may have measured. The parameters cell may
    differ: its values are in the record.
    """
    done = [cell for cell in executed if not is_injected(cell)]
    saved = notebook.cells
    lengths = [length for length in range(1, len(saved) + 1) if saved[length - 1] == done[-1]]
    for length in lengths:
        tail = done[-length:]
        pairs = zip(tail, saved[:length], strict=False)
        if len(tail) == length and all(
            ours == theirs or at == notebook.parameters_at for at, (ours, theirs) in enumerate(pairs)
        ):
            return
    raise InputError(
        f"notebook {notebook.name} as saved is not what this session executed; save it, then restart the "
        "kernel and run all cells (a copy under another name must give begin_run its own name)."
    )
