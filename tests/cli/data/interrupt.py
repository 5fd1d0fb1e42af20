"""interrupt.py SIGNAL ARGUMENTS...: runs the program with a terminal as standard error, waits until the
progress line tells of a stabilised gain, sends the signal, and exits as a shell would."""
import os
import pty
import signal
import subprocess
import sys

master, slave = pty.openpty()
run = subprocess.Popen([os.environ["FLATGAIN"]] + sys.argv[2:], stderr=slave)
os.close(slave)
seen = b""
sent = False
while True:
    try:
        more = os.read(master, 4096)
    except OSError:
        break
    if not more:
        break
    seen += more
    if not sent and b"best cost" in seen:
        run.send_signal(getattr(signal, sys.argv[1]))
        sent = True
run.wait()
sys.stderr.write(seen.decode().replace("\r", "\n"))
sys.exit(run.returncode if run.returncode >= 0 else 128 - run.returncode)
