"""Start JupyterLab on this machine only and always with a token, whatever a user's configuration says.

What is given here wins over every configuration file, as the flags of the command line do. The token is
handed over inside the process: others on the machine could read it in a command line.
"""

import os
import secrets
import sys
from pathlib import Path

from jupyterlab.labapp import main

ROOT = Path(__file__).resolve().parents[1]

if __name__ == "__main__":
    token = os.environ.pop("JUPYTER_TOKEN", "") or secrets.token_hex(24)
    flags = [
        *(["--allow-root"] if hasattr(os, "getuid") and os.getuid() == 0 else []),
        f"--ServerApp.root_dir={ROOT}",
        "--LabApp.default_url=/lab/tree/notebooks/start.ipynb",
        *sys.argv[1:],
        "--ServerApp.ip=127.0.0.1",
        "--ServerApp.sock=",
        "--ServerApp.allow_remote_access=False",
        "--ServerApp.allow_unauthenticated_access=False",
        "--ServerApp.disable_check_xsrf=False",
        "--ServerApp.allow_origin=",
        "--ServerApp.allow_origin_pat=",
        "--ServerApp.identity_provider_class=jupyter_server.auth.identity.PasswordIdentityProvider",
        "--PasswordIdentityProvider.hashed_password=",
        "--PasswordIdentityProvider.allow_password_change=False",
        f"--IdentityProvider.token={token}",
        f"--PasswordIdentityProvider.token={token}",  # a section of its own wins over that of its parent
    ]
    sys.exit(main(flags))
