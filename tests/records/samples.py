"""Records of a few rows, made without any notebook."""

import pandas as pd

from labkit.records.schema import ORIGIN, measured_table, with_origin

RUN = "0123456789abcdef"


def record(gap=(0.25, 0.5), run=RUN, **changes):
    frame = pd.DataFrame({"policy": "a", "replicate": range(len(gap)), "tasks": 5, "gap": list(gap)})
    origin = {name: "" for name in ORIGIN.names}
    origin |= {name: "{}" for name in ("versions", "parameters", "inputs", "rules")}
    origin |= {
        "run_id": run,
        "study": "s",
        "dirty": False,
        "elapsed": 1.0,
        "entropy": "1",
        "spawn_key": "[3]",
    }
    return with_origin(measured_table(frame), origin | changes)


def run_id(number):
    """The id of an invented run."""
    return f"{number:016x}"


def fill(store, count, study="s", first=0, **changes):
    """Write records of `count` runs, each with measures and parameters of its own; return their paths."""
    return [
        store.write(
            study,
            run_id(number),
            record(
                gap=(number + 0.25, number + 0.5),
                run=run_id(number),
                study=study,
                parameters=f'{{"half":{number % 2}.5,"number":{number}}}',
                started=f"2026-01-01T00:00:{number % 60:02d}.000+00:00",
                **changes,
            ),
        )[0]
        for number in range(first, first + count)
    ]
