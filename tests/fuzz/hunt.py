"""Look for faults longer than the tests do: python -m tests.fuzz.hunt READER [COUNT [SEED]].

Inputs that reach lines of labkit which no input reached before are spoilt further.
"""

import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from pathlib import Path

import labkit
from labkit.errors import InputError
from tests.fuzz.readers import READERS

LONG = 1.0  # seconds
PACKAGE = str(Path(labkit.__file__).parent)


def hunt(name: str, count: int, seed: int, guided: bool = True) -> int:
    """Read many inputs; print each kind of fault once, with the input, and return their number."""
    faults: Counter[str] = Counter()
    outcomes: Counter[str] = Counter()
    seen: set[tuple[str, int]] = set()
    fresh = False

    def trace(frame, event, argument):
        nonlocal fresh
        if PACKAGE not in frame.f_code.co_filename:
            return None
        key = (frame.f_code.co_filename, frame.f_lineno)
        if key not in seen:
            seen.add(key)
            fresh = True
        return trace

    began = time.perf_counter()
    with tempfile.TemporaryDirectory(dir="/dev/shm" if Path("/dev/shm").is_dir() else None) as folder:
        reader = READERS[name](Path(folder))
        inputs = reader.inputs(seed)
        for at in range(count):
            content = next(inputs)
            fresh, start, fault = False, time.perf_counter(), ""
            if guided:
                sys.settrace(trace)
            try:
                with warnings.catch_warnings():
                    warnings.simplefilter("error")
                    warnings.filterwarnings("ignore", message=".*have a single option")
                    reader.read(content)
                outcomes["read"] += 1
            except InputError as error:
                outcomes["refused"] += 1
                if len(str(error)) > 3000 or "\n" in str(error):
                    fault = f"no sentence: {str(error)[:60]!r} of {len(str(error))}"
            except Exception as error:
                frames = traceback.extract_tb(error.__traceback__)
                own = [each for each in frames if PACKAGE in each.filename]
                place = f"{Path(own[-1].filename).name}:{own[-1].lineno}" if own else "?"
                fault = f"{type(error).__name__} at {place}: {str(error)[:100]}"
            finally:
                sys.settrace(None)
            taken = time.perf_counter() - start
            if taken > LONG:
                fault = fault or f"slow: {taken:.1f} s"
            if fault:
                key = fault.partition(":")[0] + fault.partition(":")[2][:12]
                faults[key] += 1
                if faults[key] == 1:
                    print(f"[{at}] {fault}\n    {content[:160]!r} ({len(content)} bytes)", flush=True)
            elif (
                fresh
                and guided
                and hasattr(reader.source, "keep")
                and name not in ("frozen", "plan")
                and len(content) < 20000
            ):
                reader.source.keep(content)
    spent = time.perf_counter() - began
    print(
        f"{name}: {count} inputs in {spent:.1f} s, {dict(outcomes)}, "
        f"{sum(faults.values())} faults of {len(faults)} kinds, {len(seen)} lines"
    )
    return len(faults)


if __name__ == "__main__":
    words = sys.argv[1:]
    names = list(READERS) if words[0] == "all" else words[0].split(",")
    for each in names:
        hunt(
            each,
            int(words[1]) if len(words) > 1 else 100_000,
            int(words[2]) if len(words) > 2 else 1,
            "--plain" not in words,
        )
