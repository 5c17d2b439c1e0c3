"""What goes wrong, in words a user can act on."""

# Characters of a refusal.
LONGEST = 2_000


class InputError(ValueError):
    """Input that is refused at the door: one sentence says what, why and what to do.

    It names what was received; of a sentence that this makes absurdly long the middle is left out.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.ring(2)
    Traceback (most recent call last):
        ...
    labkit.errors.InputError: n is 2; give a whole number of at least 3.
    """

    def __init__(self, sentence: str = "") -> None:
        if len(sentence) > LONGEST:
            sentence = f"{sentence[: LONGEST // 2]} … {sentence[-LONGEST // 4 :]}"
        super().__init__(sentence)


class TooFewReplicates(InputError):
    """The asked risk and confidence need more replicates than the table holds.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> gaps = {"policy": "least-loaded", "tasks": 8, "replicate": [0, 1, 2], "gap": [1.0, 2.0, 1.5]}
    >>> measures = pd.DataFrame(gaps)
    >>> lk.headroom(measures, risk=0.1)  # doctest: +ELLIPSIS
    Traceback (most recent call last):
        ...
    labkit.errors.TooFewReplicates: measures holds 3 replicates for ... needs at least 36, so run ...
    """


class StoreError(InputError):
    """The results store cannot be written, or holds a torn or altered file.

    Examples
    --------
    >>> import tempfile
    >>> from pathlib import Path
    >>> import labkit as lk
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     table = Path(folder, "old")
    ...     table.mkdir()
    ...     written = Path(table, "manifest.json").write_text('{"rows": 4}')
    ...     lk.read_frozen("old", folder)  # doctest: +ELLIPSIS
    Traceback (most recent call last):
        ...
    labkit.errors.StoreError: frozen table old: file manifest.json is not as it was written: ...
    """


class StoreUnwritable(StoreError):
    """No record can be written at all: a full disk, a folder that is read-only or no folder."""


class SchedulerLost(RuntimeError):
    """The scheduler of a cluster does not answer (any more)."""


class NotStationary(InputError):
    """A gap that cannot be called stationary, because chains from different starts disagree.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.serve(lk.ring(3), "least-loaded", load_factor=0.97, horizon=50.0, rng=1)  # doctest: +ELLIPSIS
    Traceback (most recent call last):
        ...
    labkit.errors.NotStationary: the number of tasks in the pilot run still changes ...
    """


class HeadroomExceeded(ValueError):
    """The headroom that a rule needs lies above the highest that the user allows.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.analysis.answer import check_max_headroom, judge
    >>> measures = lk.place(lk.ring(4), "least-loaded", tasks=402, replicates=40, rng=1).measures
    >>> needed = lk.headroom(measures.assign(information="fresh"), risk=0.1)
    >>> check_max_headroom(judge(needed), max_headroom=0.25)  # doctest: +ELLIPSIS
    Traceback (most recent call last):
        ...
    labkit.errors.HeadroomExceeded: policy 'least-loaded' with information 'fresh' needs headroom ...
    """
