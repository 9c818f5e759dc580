"""The command as a process that has read the program already: each call is forked from it and starts at once.

Reading NumPy, SciPy and SQLAlchemy takes most of a short command's time, and the tests give hundreds of them.
A forked process has its own streams, folder and environment, runs what the console entry runs, and ends as
any process does. Tests about starting itself start Python anew.

Takes requests from the socket whose number is its argument: a JSON object (`arguments`, `folder`,
`environment`) with four open files, standard input, output and error and a pipe into which first the number
of the process and then its exit status are written, a line each.
"""

from __future__ import annotations

import importlib
import io
import json
import os
import pkgutil
import signal
import socket
import sys

MOST_BYTES = 1 << 17


def read_all() -> None:
    """Read every room of the house, as different commands would."""
    for house in ("harness", "drivers"):
        package = importlib.import_module(house)
        for room in pkgutil.walk_packages(package.__path__, f"{house}."):
            if ".migrations" not in room.name:
                importlib.import_module(room.name)


def become(request: dict, files: list[int]) -> None:
    """Take on the streams, folder, environment and arguments asked for."""
    for number, file in enumerate(files):
        os.dup2(file, number)
        os.close(file)
    os.chdir(request["folder"])
    os.environ.clear()
    os.environ.update(request["environment"])
    sys.argv = ["bitassay", *request["arguments"]]
    sys.stdin = io.TextIOWrapper(io.BufferedReader(io.FileIO(0)), encoding="utf-8")
    sys.stdout = io.TextIOWrapper(io.BufferedWriter(io.FileIO(1, "w")), encoding="utf-8")
    errors = io.BufferedWriter(io.FileIO(2, "w"))
    sys.stderr = io.TextIOWrapper(errors, "utf-8", "backslashreplace", line_buffering=True)


def serve(requests: socket.socket) -> bool:
    """Fork for each request; True in a process that is to run the command, False at the end."""
    signal.signal(signal.SIGCHLD, signal.SIG_IGN)  # those who wait for a command end by themselves
    while True:
        message, files, _, _ = socket.recv_fds(requests, MOST_BYTES, 4)
        if not message:
            return False
        if os.fork():
            for file in files:
                os.close(file)
            continue
        signal.signal(signal.SIGCHLD, signal.SIG_DFL)
        requests.close()
        *streams, told = files
        process = os.fork()
        if not process:
            os.close(told)
            become(json.loads(message), streams)
            return True
        os.write(told, b"%d\n" % process)
        for file in streams:
            os.close(file)
        status = os.waitstatus_to_exitcode(os.waitpid(process, 0)[1])
        os.write(told, b"%d\n" % status)
        os._exit(0)


if __name__ == "__main__":
    read_all()
    from harness.cli.main import main

    with socket.socket(fileno=int(sys.argv[1])) as asked:
        is_command = serve(asked)
    if is_command:
        main()
