"""Which scheduler is in use: the one named by `use_scheduler`, else by the variable LABKIT_SCHEDULER."""

import os
import re
import warnings

from labkit.errors import InputError

VARIABLE = "LABKIT_SCHEDULER"
_ADDRESS = re.compile(r"(tcp|tls)://(\[[0-9a-fA-F:.%]+\]|[A-Za-z0-9._-]+):[0-9]{1,5}")


def in_use() -> str | None:
    """Return the address of the scheduler in use, or None."""
    address = os.environ.get(VARIABLE)
    return check_address(address) if address else None


def check_address(address: object) -> str:
    """Return the address of a scheduler when it has the form of one."""
    if isinstance(address, str) and _ADDRESS.fullmatch(address):
        return address
    raise InputError(f"scheduler is {address!r}; give its address, such as tcp://10.0.0.5:8786.")


def use_scheduler(address: str | None) -> None:
    """Have all replicates run by the workers of a Dask cluster from now on, or here again.

    Parameters
    ----------
    address : str or None
        Where the scheduler listens, such as ``"tcp://10.0.0.5:8786"`` (``tls://`` with the certificates that
        Dask's own configuration names). None: threads of this process, as before.

    Raises
    ------
    InputError
        When nothing answers there, or a worker has another version of labkit, of a package that computes, or
        another lock than this process.

    Notes
    -----
    Results are the same to the bit. `labkit.replay` is not shared: it reads its trace here.

    Dask runs what its clients send: let a scheduler listen only where all who reach it are trusted.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.use_scheduler(None)
    """
    if address is None:
        os.environ.pop(VARIABLE, None)
        return
    from labkit.sharing.cluster import connected

    if connected(check_address(address)).check() == 0:
        warnings.warn(f"scheduler {address} has no worker yet; calls wait until one joins", stacklevel=2)
    os.environ[VARIABLE] = address
