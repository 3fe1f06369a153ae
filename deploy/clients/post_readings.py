#!/usr/bin/env python3
"""Sends readings to Counterpoise from a spool on disk.

    some-source | post_readings.py --url http://127.0.0.1:8080 --plant gannet-holm \\
        --spool /var/spool/readings

Standard input holds one reading a line, as JSON:

    {"tag": "FT-101", "time": "2026-03-17T10:05:07.25Z", "value": 345.8, "quality": 2147483648}

`quality` is good (unless set), uncertain or bad, or an OPC UA status code as the
server gave it: codes are sent as they are and kept as they are, nothing is mapped
here.

Lines are put into blocks, and a block is on disk (fsync) before it is sent. A block
is sent until it is taken, with the same bytes each time: the service counts nothing
twice, so that an answer that was lost does no harm. Blocks go out in the order in
which they came. After 429 and 503 the service's Retry-After is kept; after other
failures the pauses double, up to five minutes. A block that can never be taken (400,
413, 415, 422) is put aside in `refused/` with the answer beside it, and the next one
is sent. After 401, 403 and 404 the block stays: somebody has to mend the token or the
plant first.

At the end of the input everything is sent before the program ends; what is left of a
program that was killed is sent at the next start. Python 3.9 or newer, standard
library only, Linux or another Unix.
"""

import argparse
import email.utils
import fcntl
import gzip
import http.client
import json
import os
import queue
import random
import signal
import ssl
import sys
import threading
import time
import urllib.parse

LONGEST_PAUSE = 300.0
NEVER_TAKEN = {400, 413, 415, 422}


def log(text):
    print(f"post_readings: {text}", file=sys.stderr, flush=True)


class Spool:
    """Blocks in a folder, oldest first; each is whole or not there."""

    def __init__(self, folder):
        self.folder = folder
        self.refused = os.path.join(folder, "refused")
        os.makedirs(self.refused, exist_ok=True)
        self.lock = open(os.path.join(folder, "lock"), "w")
        try:
            fcntl.flock(self.lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            sys.exit(f"post_readings: another one works on the spool {folder}")
        for name in os.listdir(folder):
            if name.endswith(".part"):
                os.remove(os.path.join(folder, name))
        blocks = self.blocks() + sorted(os.listdir(self.refused))
        self.next = 1 + max((int(name.split(".")[0]) for name in blocks), default=0)

    def blocks(self):
        return sorted(name for name in os.listdir(self.folder) if name.endswith(".ndjson.gz"))

    def put(self, lines):
        name = f"{self.next:012}.ndjson.gz"
        self.next += 1
        # Without a time in its head: the same lines give the same bytes.
        content = gzip.compress("".join(lines).encode(), mtime=0)
        path = os.path.join(self.folder, name)
        with open(path + ".part", "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.rename(path + ".part", path)
        self.sync()

    def read(self, name):
        with open(os.path.join(self.folder, name), "rb") as file:
            return file.read()

    def done(self, name):
        os.remove(os.path.join(self.folder, name))

    def put_aside(self, name, answer):
        with open(os.path.join(self.refused, name + ".answer"), "wb") as file:
            file.write(answer)
        os.rename(os.path.join(self.folder, name), os.path.join(self.refused, name))
        self.sync()

    def sync(self):
        folder = os.open(self.folder, os.O_RDONLY)
        os.fsync(folder)
        os.close(folder)


class Service:
    """The service at an address, over one connection that is kept."""

    def __init__(self, url, plant, token_file, ca_file):
        parts = urllib.parse.urlsplit(url)
        if parts.scheme not in ("http", "https") or not parts.hostname:
            sys.exit(f"post_readings: {url} is no http or https address")
        self.host, self.port = parts.hostname, parts.port
        self.tls = ssl.create_default_context(cafile=ca_file) if parts.scheme == "https" else None
        self.path = f"{parts.path.rstrip('/')}/v1/plants/{urllib.parse.quote(plant, safe='')}/readings"
        self.token_file = token_file
        self.connection = None

    def post(self, body):
        """Status, value of Retry-After and answer; 0 where there is no answer."""
        headers = {"Content-Type": "application/x-ndjson", "Content-Encoding": "gzip"}
        try:
            if self.token_file:
                # Read each time, so that a new token needs no restart.
                with open(self.token_file, encoding="ascii") as file:
                    headers["Authorization"] = "Bearer " + file.read().strip()
            if self.connection is None:
                if self.tls:
                    self.connection = http.client.HTTPSConnection(
                        self.host, self.port, timeout=60, context=self.tls)
                else:
                    self.connection = http.client.HTTPConnection(self.host, self.port, timeout=60)
            self.connection.request("POST", self.path, body, headers)
            response = self.connection.getresponse()
            answer = response.read()
            if response.will_close:
                self.close()
            return response.status, response.getheader("Retry-After"), answer
        except (OSError, http.client.HTTPException) as error:
            self.close()
            return 0, None, str(error).encode()

    def close(self):
        if self.connection:
            self.connection.close()
        self.connection = None


def asked_for(retry_after):
    """Seconds that a Retry-After asks for (RFC 9110, section 10.2.3)."""
    if not retry_after:
        return 0.0
    if retry_after.strip().isdigit():
        return min(float(retry_after), 3600.0)
    try:
        date = email.utils.parsedate_to_datetime(retry_after)
        return min(max(date.timestamp() - time.time(), 0.0), 3600.0)
    except (TypeError, ValueError):
        return 0.0


def tell_refused(answer):
    """Readings that the service did not take are named in its answer."""
    try:
        told = json.loads(answer)
    except ValueError:
        return
    for one in told.get("refused", []):
        log(f"not taken: {one.get('tag')} at {one.get('time')}: {one.get('reason')}")


def send(spool, service, stopped):
    """Sends every block that there is; returns when there is none."""
    failures = 0
    while not stopped.is_set():
        blocks = spool.blocks()
        if not blocks:
            return
        name = blocks[0]
        status, retry_after, answer = service.post(spool.read(name))
        if 200 <= status < 300:
            failures = 0
            tell_refused(answer)
            spool.done(name)
            continue
        told = answer.decode(errors="replace")[:500]
        if status in NEVER_TAKEN:
            log(f"block {name} is refused ({status}) and put aside: {told}")
            failures = 0
            spool.put_aside(name, answer)
            continue
        failures += 1
        pause = min(2.0 ** min(failures - 1, 9), LONGEST_PAUSE) * random.uniform(0.5, 1.0)
        if status in (429, 503):
            # The service knows best; without its word, our own.
            pause = asked_for(retry_after) or pause
        log(f"block {name} waits {pause:.1f} s ({status or 'no answer'}): {told}")
        stopped.wait(pause)


def collect(lines, count, seconds):
    """Blocks of lines: so many, or what has come within so many seconds. Standard input
    is read by a thread of its own, so that a slow source does not hold a block up."""
    waiting = queue.Queue(maxsize=10 * count)

    def read():
        for line in lines:
            if line.strip():
                waiting.put(line if line.endswith("\n") else line + "\n")
        waiting.put(None)

    threading.Thread(target=read, daemon=True).start()
    block, until = [], None
    while True:
        try:
            line = waiting.get(timeout=max(until - time.monotonic(), 0) if until else 1.0)
        except queue.Empty:
            line = ""
        if line:
            block.append(line)
            until = until or time.monotonic() + seconds
        full = len(block) >= count or (until and time.monotonic() >= until)
        if block and (full or line is None):
            yield block
            block, until = [], None
        elif line == "":
            # Something may be left of before.
            yield []
        if line is None:
            return


def main():
    parser = argparse.ArgumentParser(description=__doc__.split("\n\n")[0])
    parser.add_argument("--url", required=True, help="address of the service")
    parser.add_argument("--plant", required=True, help="name of the plant")
    parser.add_argument("--spool", required=True, help="folder for what is not sent yet")
    parser.add_argument("--token-file", help="file with a token that has the scope `send`")
    parser.add_argument("--ca-file", help="certificates that the service's is signed by")
    parser.add_argument("--lines", type=int, default=1000, help="readings in a block at most")
    parser.add_argument("--seconds", type=float, default=5.0, help="a block waits at most so long")
    arguments = parser.parse_args()
    spool = Spool(arguments.spool)
    service = Service(arguments.url, arguments.plant, arguments.token_file, arguments.ca_file)
    stopped = threading.Event()
    signal.signal(signal.SIGTERM, lambda *_: stopped.set())
    work = threading.Event()
    ended = threading.Event()

    def sender():
        while not stopped.is_set():
            work.wait(1.0)
            work.clear()
            last = ended.is_set()
            send(spool, service, stopped)
            if last:
                return

    thread = threading.Thread(target=sender)
    thread.start()
    for block in collect(sys.stdin, max(arguments.lines, 1), arguments.seconds):
        if stopped.is_set():
            break
        if block:
            spool.put(block)
        work.set()
    ended.set()
    work.set()
    thread.join()
    service.close()
    sys.exit(0 if not spool.blocks() else 1)


if __name__ == "__main__":
    main()
