"""Kill writers of chains with signal 9 at random moments: chain_killer.py FOLDER REPETITIONS UNTIL.

Each writer is a process of its own, forked from this one so that it need not import everything again. The moment is
a random evaluation of the posterior, and then a random time of the length of one step: so it depends on how far the
writer is, however fast the machine, and hits the writing of blocks like everything else.
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
    calls = [0]
    begin = time.perf_counter()
    chain_writer.write(folder / "timing.h5", until, report=lambda: calls.__setitem__(0, calls[0] + 1))
    one_call = (time.perf_counter() - begin) / calls[0]
    survived = []
    for number in range(repetitions):
        path = folder / f"{number}.h5"
        dice = random.Random(number)
        # Late moments more often: the first half of a short run is its pilot, which writes nothing.
        goal, delay = int(calls[0] * dice.random() ** (1 / 3)), 4.0 * one_call * dice.random()
        reading, writing = os.pipe()
        child = os.fork()
        if child == 0:
            os.close(reading)
            chain_writer.write(path, until, report=lambda end=writing: os.write(end, b"."))
            os._exit(0)
        os.close(writing)
        while goal >= 0 and (seen := os.read(reading, 1)):
            goal -= len(seen)
        time.sleep(delay)
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        os.close(reading)
        survived.append(verify(path).steps if path.exists() else -1)
        chain_writer.write(path, until)
    print(json.dumps(survived))


if __name__ == "__main__":
    main()
