"""One notebook executed through papermill, with everything that papermill lets pass looked at."""

import json
import logging
import re
import traceback
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import labkit.errors
from labkit.studies.light import import_jsonschema
from labkit.studies.place import HERE, Place

# Errors that say all in one sentence; the refusals among them mean a value, as opposed to code that broke.
SENTENCES = {name: each for name, each in vars(labkit.errors).items() if isinstance(each, type)}
REFUSALS = {name for name, each in SENTENCES.items() if issubclass(each, labkit.errors.InputError)}

# IPython colours its tracebacks for a terminal; they go into files.
_COLOUR = re.compile(r"\x1b\[[0-9;]*[A-Za-z]")


@dataclass(frozen=True)
class Execution:
    """How an execution went; `error` is empty when every cell ran to its end."""

    error: str = ""
    refused: bool = False
    details: str = ""


def execute(notebook: Path, parameters: dict[str, Any], output: Path, place: Place = HERE) -> Execution:
    """Execute a notebook with these parameters in a kernel of its own; safe in several threads.

    Parameters
    ----------
    notebook : Path
        The saved notebook.
    parameters : dict
        Values for its parameters cell.
    output : Path
        Where the executed notebook goes, whole or partial.
    place : Place
        The checkout whose labkit, and the Python that, the kernel uses.

    Returns
    -------
    Execution
        Errors in cells, ``sys.exit``, cells left out and dead kernels are all reported, never raised.
    """
    from labkit.studies.kernels import end_kernel, own_event_loop, start_kernel

    with own_event_loop():
        kernel = start_kernel(notebook, place)
        try:
            return _execute(notebook, parameters, output, kernel)
        finally:
            end_kernel(kernel)


def _execute(notebook: Path, parameters: dict[str, Any], output: Path, kernel: type) -> Execution:
    import_jsonschema()
    from papermill import execute_notebook
    from papermill.exceptions import PapermillExecutionError

    # names and types have been checked; papermill's own guesses at them are noise
    logging.getLogger("papermill").setLevel(logging.CRITICAL)
    try:
        execute_notebook(
            # papermill fills braces in paths from the parameters
            str(notebook).replace("{", "{{").replace("}", "}}"),
            str(output).replace("{", "{{").replace("}", "}}"),
            parameters=parameters,
            kernel_name="python3",
            progress_bar=False,
            kernel_manager_class=kernel,
            shutdown_kernel="immediate",  # all is on disk by then; a polite end takes half a second
        )
    except PapermillExecutionError as error:
        refused = error.ename in REFUSALS
        sentence = error.evalue if error.ename in SENTENCES else f"{error.ename}: {error.evalue}"
        return Execution(_plain(sentence.strip()), refused, _plain("\n".join(error.traceback)))
    except Exception as error:
        return Execution(f"{type(error).__name__}: {error}".strip(), False, traceback.format_exc())
    return _look_through(output)


def _plain(text: str) -> str:
    return _COLOUR.sub("", text)


def _look_through(output: Path) -> Execution:
    cells = json.loads(output.read_bytes())["cells"]
    own = [cell for cell in cells if "injected-parameters" not in cell["metadata"].get("tags", [])]
    for at, cell in enumerate(own, start=1):
        if cell["cell_type"] != "code" or not "".join(cell["source"]).strip():
            continue
        exits = [each for each in cell["outputs"] if each["output_type"] == "error"]
        if exits:
            error = f"cell {at} ended the notebook with {exits[0]['ename']}; let every cell run to its end."
            return Execution(error, False, _plain("\n".join(exits[0]["traceback"])))
        if cell["execution_count"] is None:
            return Execution(f"cell {at} was not executed; let every cell run to its end.")
    return Execution()
