"""The process of a kernel: it imports what its notebook will, while the caller still loads its own side.

Arguments: module names with commas between, then those of ipykernel.
"""

import contextlib
import gc
import sys
from importlib import import_module

from ipykernel.kernelapp import IPKernelApp


def main() -> None:
    """Start the kernel."""
    preload, arguments = sys.argv[1], sys.argv[2:]
    application = IPKernelApp.instance()
    application.initialize(arguments)
    gc.disable()  # importing makes little garbage, and looking for it takes a twentieth of the time
    for module in filter(None, preload.split(",")):
        # what cannot be imported fails in the cell that asks for it
        with contextlib.suppress(Exception):
            import_module(module)
    gc.enable()
    application.start()


if __name__ == "__main__":
    main()
