"""Progress bars: on standard error, on a terminal only, and gone when the work is done."""

import fcntl
import os
import pty
import select
import struct
import subprocess
import sys
import termios


def on_terminal(folder, *arguments):
    """Runs a command with standard error on a terminal; gives exit status, standard output and what the terminal was sent."""
    terminal, end = pty.openpty()
    fcntl.ioctl(end, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 100, 0, 0))  # a new terminal has no size at all
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(sys.path), "OPENBLAS_NUM_THREADS": "1"}
    process = subprocess.Popen(
        [sys.executable, "-m", "withstand", *arguments], stdout=subprocess.PIPE, stderr=end, cwd=folder, env=environment
    )
    os.close(end)
    sent = b""
    while select.select([terminal], [], [], 120.0)[0]:
        try:
            piece = os.read(terminal, 65536)
        except OSError:  # Linux says so when the other end is closed
            break
        if not piece:
            break
        sent += piece
    os.close(terminal)
    out = process.communicate(timeout=120)[0]
    return process.returncode, out.decode(), sent.decode()


def test_bars_on_a_terminal(folder):
    code, out, sent = on_terminal(folder, "run", "small.toml", "--workers", "1")
    assert code == 0
    assert "replicates" in sent
    assert "%|" in sent
    assert "%|" not in out
    assert sent.split("\r")[-2].strip() == ""  # the last bar was wiped out


def test_quiet_has_none(folder):
    assert on_terminal(folder, "run", "small.toml", "--workers", "1", "--quiet") == (0, "", "")
