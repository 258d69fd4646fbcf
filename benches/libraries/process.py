"""A contender as seen from outside: a process that computes when asked to."""

import json
import os
import select
import subprocess
import sys
import time

import memory

# Often enough to see what a block needs, seldom enough not to be felt.
LOOK_SECONDS = 0.2
# More than any block: loading the largest system takes minutes.
PATIENCE_SECONDS = 1800


class Trouble(Exception):
    """A process that ended, fell silent or answered something else."""


class Process:
    def __init__(self, name, command, environment, folder):
        self.name = name
        self.iterations = 1
        self.seconds_per_iteration = []
        self.resident_bytes_max = 0
        self.unread = b""
        try:
            self.process = subprocess.Popen(
                command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, env=environment, cwd=folder
            )
        except OSError as error:
            raise Trouble(error) from error
        try:
            self.ready = self.answer()
            if self.ready.get("ready") is not True:
                raise Trouble(f"it is not ready: {self.ready}")
        except Trouble:
            self.end()
            raise

    def __str__(self):
        return f"{self.name}: {json.dumps(self.ready)}"

    def choose_block(self, seconds):
        """Two iterations to warm up, then as many as tell how many fit into a block."""
        for trial in (2, 4):
            per_iteration = self.ask(trial)
            self.resident_bytes_max = 0
        # A difference of two short runs may come out as nothing.
        self.iterations = max(2, round(seconds / max(per_iteration, seconds / 10_000)))

    def block(self):
        self.seconds_per_iteration.append(self.ask(self.iterations))

    def ask(self, iterations):
        """Seconds for each of so many iterations."""
        try:
            self.process.stdin.write(f"{iterations}\n".encode())
            self.process.stdin.flush()
        except OSError as error:
            raise Trouble(error) from error
        answer = self.answer()
        try:
            return answer["seconds"] / answer["iterations"]
        except (KeyError, TypeError, ZeroDivisionError) as error:
            raise Trouble(f"it answered {answer}") from error

    def answer(self):
        """The next line that is a record; looks at the memory while it waits."""
        end = time.monotonic() + PATIENCE_SECONDS
        while time.monotonic() < end:
            while b"\n" in self.unread:
                line, self.unread = self.unread.split(b"\n", 1)
                record = parsed(line)
                if record is not None:
                    self.look()
                    return record
            if select.select([self.process.stdout], [], [], LOOK_SECONDS)[0]:
                more = os.read(self.process.stdout.fileno(), 1 << 16)
                if not more:
                    raise Trouble(f"it ended with status {self.process.wait()}")
                self.unread += more
            else:
                self.look()
        raise Trouble(f"no answer for {PATIENCE_SECONDS} s")

    def look(self):
        found = map(memory.resident_bytes, memory.last_descendants(self.process.pid))
        self.resident_bytes_max = max(self.resident_bytes_max, *found, 0)

    def end(self):
        """Ends the input, which ends the process."""
        try:
            self.process.stdin.close()
        except OSError:
            pass
        try:
            self.process.wait(timeout=30)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()
        self.process.stdout.close()


def parsed(line):
    """The record in a line; None, and the line goes to the standard error, if there is none."""
    text = line.decode(errors="replace").strip()
    if text.startswith("{"):
        try:
            return json.loads(text)
        except ValueError:
            pass
    if text:
        print(text, file=sys.stderr)
    return None


def last_record(command, environment, folder):
    """Runs a command to its end; the last record it printed."""
    try:
        done = subprocess.run(command, stdout=subprocess.PIPE, env=environment, cwd=folder)
    except OSError as error:
        raise Trouble(error) from error
    records = [record for record in map(parsed, done.stdout.splitlines()) if record is not None]
    if done.returncode != 0 or not records or "seconds" not in records[-1]:
        raise Trouble(f"status {done.returncode}, {len(records)} records with no seconds in the last")
    return records[-1]
