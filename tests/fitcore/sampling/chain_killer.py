"""Kill writers of chains with signal 9 at random moments: chain_killer.py FOLDER REPETITIONS UNTIL.

Each writer is a process of its own, forked from this one so that it need not import everything again.
Prints the number of committed steps that each kill left (-1: no file yet), after finishing every chain.
"""

import json
import os
import random
import signal
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

import chain_writer

from fitcore.sampling.verify import verify


def main():
    folder, repetitions, until = Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3])
    begin = time.perf_counter()
    chain_writer.write(folder / "timing.h5", until)
    duration = time.perf_counter() - begin
    survived = []
    for number in range(repetitions):
        path = folder / f"{number}.h5"
        child = os.fork()
        if child == 0:
            chain_writer.write(path, until)
            os._exit(0)
        time.sleep(random.Random(number).uniform(0.1, 1.0) * duration)
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        survived.append(verify(path).steps if path.exists() else -1)
        chain_writer.write(path, until)
    print(json.dumps(survived))


if __name__ == "__main__":
    main()
