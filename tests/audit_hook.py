"""Installed as ``sitecustomize`` in a process and its children: no network, and a list of files.

Every socket, look-up of a host and fetching of a URL fails; they, pickles that are loaded,
programs that are started and files that are opened are written to the file that the
environment names (Python's audit events, PEP 578).
"""

import os
import sys

LOG = os.environ["AUDIT_HOOK_LOG"]
REFUSED = (
    *("socket.", "urllib.Request", "ftplib.", "http.client.", "smtplib.", "os.system", "os.exec"),
    *("pickle.find_class", "ctypes.dlopen.remote", "webbrowser.open"),
)
busy = False


def hook(event: str, arguments: tuple[object, ...]) -> None:
    """Write down what matters, and refuse what must not be."""
    global busy
    refused = event.startswith(REFUSED) and not str(arguments[0]).startswith("data:")
    if busy or not (refused or event in {"open", "subprocess.Popen"}):
        return
    busy = True
    try:
        with open(LOG, "a", encoding="utf-8", errors="backslashreplace") as log:
            log.write(f"{event}\t{arguments[0]!s}\n")
    finally:
        busy = False
    if refused:
        raise RuntimeError(f"{event} is not allowed")


sys.addaudithook(hook)
