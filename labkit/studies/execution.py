"""One notebook executed through papermill, with everything that papermill lets pass looked at."""

import json
import logging
import re
import traceback
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from threading import Event, Timer
from typing import Any

import labkit.errors
from labkit.sharing.waiting import VARIABLE
from labkit.studies.light import import_jsonschema
from labkit.studies.place import HERE, Place

# Errors that say all in one sentence; the refusals among them mean a value, as opposed to code that broke.
SENTENCES = {name: each for name, each in vars(labkit.errors).items() if isinstance(each, type)}
REFUSALS = {name for name, each in SENTENCES.items() if issubclass(each, labkit.errors.InputError)}

# What an execution that was ended for its time is called.
TOO_LONG = "TimeoutError"

# Until a kernel is given up that does not answer; many may start at once.
START_SECONDS = 180

# IPython colours its tracebacks for a terminal; they go into files.
_COLOUR = re.compile(r"\x1b\[[0-9;]*[A-Za-z]")


@dataclass(frozen=True)
class Execution:
    """How an execution went; `error` is empty when every cell ran to its end, `kind` names its class."""

    error: str = ""
    refused: bool = False
    details: str = ""
    kind: str = ""


def execute(
    notebook: Path,
    parameters: dict[str, Any],
    output: Path,
    place: Place = HERE,
    *,
    environment: Mapping[str, str] | None = None,
    seconds: float | None = None,
) -> Execution:
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
    environment : dict, optional
        Variables for the kernel, besides those of this process.
    seconds : float, optional
        When to end a kernel that still computes.

    Returns
    -------
    Execution
        Errors in cells, ``sys.exit``, cells left out, dead kernels and too long a time are all reported,
        never raised.
    """
    from labkit.studies.kernels import end_kernel, end_now, own_event_loop, start_kernel

    with own_event_loop():
        try:
            kernel = start_kernel(notebook, place, {VARIABLE: "off", **(environment or {})})
        except Exception as error:
            return _broken(error)
        late = Event()

        def end() -> None:
            late.set()
            end_now(kernel)

        watch = Timer(seconds or 0.0, end)
        watch.daemon = True
        if seconds is not None:
            watch.start()
        try:
            result = _execute(notebook, parameters, output, kernel)
        finally:
            watch.cancel()
            end_kernel(kernel)
    if late.is_set() and result.error:
        took = f"it took longer than {seconds:g} seconds and was ended; allow it more, or mend what hangs."
        return Execution(took, False, result.details, TOO_LONG)
    return result


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
            start_timeout=START_SECONDS,
            kernel_manager_class=kernel,
            shutdown_kernel="immediate",  # all is on disk by then; a polite end takes half a second
        )
    except PapermillExecutionError as error:
        refused = error.ename in REFUSALS
        sentence = error.evalue if error.ename in SENTENCES else f"{error.ename}: {error.evalue}"
        return Execution(_plain(sentence.strip()), refused, _plain("\n".join(error.traceback)), error.ename)
    except Exception as error:
        return _broken(error)
    return _look_through(output)


def _broken(error: Exception) -> Execution:
    """Return the account of an error that is not the notebook's."""
    name = type(error).__name__
    return Execution(f"{name}: {error}".strip(), False, traceback.format_exc(), name)


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
