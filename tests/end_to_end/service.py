#!/usr/bin/python3
"""The running service as a whole: start, stop, crash, order of delivery, answers, command line.

usage: service.py PATH_TO_NIGHTWEIGH [SEED]

  demo        the invented market of `nightweigh scenario`: every command, its --json, --help and exit code; every
              night over HTTP (weights sum to 1 within 1e-12, no NaN); the log page by page; problem documents
  long_batch  one file that makes some thousand nights possible: HTTP answers within a second meanwhile; TERM and
              INT in the middle end the process within 10 seconds; started again it reaches the journal heads of
              the uninterrupted run
  crashes     kill -9 at random moments, from the first millisecond of the first start on, while files wait in the
              drop folder and a client feeds the same closes over the socket: the heads of the uninterrupted run
  any_order   40 days cut into pieces, shuffled, repeated, over both ways, once with a kill -9: identical heads
SEED drives what is random and is printed. Uses the standard library only. Exit 0: all as it should be.
"""
import csv
import glob
import http.client
import json
import os
import random
import re
import shutil
import signal
import socket
import sys
import tempfile
import threading
import time

sys.dont_write_bytecode = True  # the source folder stays as it is
from live import Checks, Service, closes_line, put, read_json, run, weekdays  # noqa: E402

BOOKS = ["harbour", "meadow"]
COMMANDS = ["serve", "inspect", "feed", "target", "log", "night", "scenario"]
WEIGHT_OBJECTS = ["held_before", "held_after", "wanted", "moves_to"]
STOP_LIMIT_S = 10.0
LATENCY_LIMIT_S = 1.0


def scenario(program, folder, seed=7):
    """Writes the demo market. Returns (settings, data_dir, rows by date)."""
    done = run(program, "scenario", "--out", folder, "--seed", seed)
    if done.returncode != 0:
        raise RuntimeError(done.stderr)
    days = {}
    for path in sorted(glob.glob(os.path.join(folder, "closes", "*.csv"))):
        with open(path, newline="", encoding="utf-8") as file:
            for row in csv.DictReader(file):
                days.setdefault(row["date"], []).append({k: v for k, v in row.items() if v})
    for path in sorted(glob.glob(os.path.join(folder, "last", "*.json"))):
        with open(path, encoding="utf-8") as file:
            for row in read_json(file.read())["closes"]:
                days.setdefault(row["date"], []).append(row)
    return os.path.join(folder, "nightweigh.yaml"), os.path.join(folder, "var"), days


def heads(service, books):
    return {book: service.head(book) for book in books}


def wait_until(condition, limit_s, what):
    deadline = time.monotonic() + limit_s
    while not condition():
        if time.monotonic() > deadline:
            raise RuntimeError(f"{what}: not within {limit_s} s")
        time.sleep(0.01)


# ---- the demo market

def demo(checks, program, folder, seed):
    folder = os.path.join(folder, "demo")
    settings, data_dir, days = scenario(program, folder)
    dates = sorted(days)
    checks.equal(len(dates), 780, "the demo has 780 days")
    on = ["--settings", settings]

    def json_of(what, done, code=0):
        checks.equal(done.returncode, code, f"{what}: exit code")
        try:
            return read_json(done.stdout)
        except ValueError as error:
            checks.that(False, f"{what}: parseable JSON", f"{error}: {done.stdout[:300]!r}")
            return {}

    again = json_of("scenario --json", run(program, "scenario", "--out", folder + "-again", "--seed", 7, "--json"))
    checks.equal((len(again["monthly"]), len(again["daily"])), (36, 5), "scenario --json: files")
    with open(settings, "rb") as one, open(again["settings"], "rb") as other:
        checks.that(one.read() == other.read(), "the same seed gives the same settings")
    checks.equal(run(program, "scenario", "--out", folder).returncode, 1, "scenario into a full folder: exit code")

    # Nobody runs: said, with the remedy.
    for command in (["target", "--book", "harbour"], ["log", "--book", "harbour"],
                    ["night", "--book", "harbour", dates[0]], ["feed", again["daily"][0]]):
        done = run(program, *command, *on)
        checks.that(done.returncode == 1 and "nightweigh serve" in done.stderr,
                    f"{command[0]} without a service: exit code 1 and what to do", (done.returncode, done.stderr))
    fresh = json_of("inspect --json before the first start", run(program, "inspect", "--json", *on))
    checks.equal((fresh["database"], fresh["problems"]), (False, []), "inspect before the first start")

    with Service(program, settings, data_dir).start() as service:
        checks.equal(sorted(service.endpoints), ["feed", "http"], "endpoints.json: its members")
        for name, endpoint in service.endpoints.items():
            checks.that(re.fullmatch(r"127\.0\.0\.1:[1-9][0-9]*", endpoint), f"endpoints.json: {name}", endpoint)
        empty = service.get("/v1/books/harbour/target")
        checks.equal((empty.status, empty.headers["Content-Type"]), (404, "application/problem+json"),
                     "target before the first night")

        files = sorted(glob.glob(os.path.join(folder, "closes", "*.csv")))
        one = json_of("feed --json", run(program, "feed", "--json", *on, files[0]))
        checks.equal((one["status"], one["errors"]), ("taken", []), "feed --json: taken")
        done = run(program, "feed", "--json", *on, *files[1:])
        answers = [read_json(line) for line in done.stdout.splitlines()]
        checks.equal([a["status"] for a in answers], ["taken"] * 35, "feed --json: one line a file")
        known = json_of("feed again", run(program, "feed", "--json", *on, files[0]))
        checks.equal((known["status"], known["rows"]), ("known", 0), "feed again: known")
        for day in dates[-5:]:
            done = run(program, "feed", *on, os.path.join(folder, "last", f"closes-{day}.json"))
            checks.that(done.returncode == 0 and f"night of {day}" in done.stdout, f"feed in words: {day}", done.stdout)
        bad = os.path.join(folder, "bad.csv")
        with open(bad, "w", encoding="utf-8") as file:
            file.write(f"date,instrument,close\n{dates[-1]},ALDER,1.00\n")
        done = run(program, "feed", "--json", *on, bad)
        refused = json_of("feed of a conflict --json", done, 1)
        checks.equal(refused["status"], "refused", "feed of a conflict")
        checks.that("row 1, column close" in done.stderr, "feed of a conflict: words", done.stderr)

        every_night(checks, service, dates)
        the_log(checks, service, dates)
        problems(checks, service)

        for book in BOOKS:
            target = json_of("target --json", run(program, "target", *on, "--book", book, "--json"))
            checks.equal((target["book"], target["date"]), (book, dates[-1]), f"target of {book}")
            night = json_of("night --json", run(program, "night", *on, "--book", book, dates[-1], "--json"))
            checks.equal(night["hash"], service.head(book), f"the last night of {book} is the journal's head")
            log = json_of("log --json", run(program, "log", *on, "--book", book, "--limit", 10, "--json"))
            checks.equal([row["date"] for row in log["rows"]], dates[:-11:-1], f"log of {book}: the last ten")
            for command in (["target"], ["log"], ["log", "--reasons", "--verdict", "move"], ["night", dates[-1]]):
                done = run(program, *command, *on, "--book", book)
                lines = done.stdout.splitlines()
                checks.that(done.returncode == 0 and len(lines) > 3 and not done.stderr, f"{command} in words", done.stderr)
                checks.that(max(map(len, lines)) <= 160, f"{command} in words: width", max(map(len, lines)))
        report = json_of("inspect --json", run(program, "inspect", *on, "--json"))
        checks.equal({b["book"]: b["journal_head"] for b in report["books"]}, heads(service, BOOKS),
                     "inspect --json: journal heads")
        checks.equal((report["database"], report["problems"]), (True, []), "inspect --json: no problems")
        checks.equal(run(program, "inspect", *on).returncode, 0, "inspect in words")

        for what, arguments, code in (
            ("no command", [], 2), ("unknown command", ["fly"], 2), ("no settings", ["target"], 2),
            ("settings that are not there", ["target", "--settings", settings + ".none"], 2),
            ("unknown option", ["target", *on, "--colour"], 2), ("no such book", ["target", *on, "--book", "x"], 2),
            ("which book?", ["target", *on], 2), ("no date", ["night", *on, "--book", "harbour"], 2),
            ("a date of another form", ["night", *on, "--book", "harbour", "2.1.2024"], 2),
            ("no such night", ["night", *on, "--book", "harbour", "2020-01-01"], 1),
            ("limit out of range", ["log", *on, "--book", "harbour", "--limit", "0"], 2),
            ("unknown verdict", ["log", *on, "--book", "harbour", "--verdict", "fly"], 2),
            ("feed without files", ["feed", *on], 2), ("feed of no file", ["feed", *on, bad + ".none"], 1),
        ):
            done = run(program, *arguments, limit_s=60)
            checks.equal(done.returncode, code, f"{what}: exit code")
            checks.that(done.stderr.strip() or what == "no command", f"{what}: says why on standard error", done.stdout)
        final = heads(service, BOOKS)
        code, seconds = service.end()
        checks.that(code == 0 and seconds < STOP_LIMIT_S, "TERM at rest", (code, seconds))
        checks.that(not os.path.exists(os.path.join(data_dir, "endpoints.json")), "endpoints.json goes at the end")

    for command in COMMANDS:
        done = run(program, command, "--help")
        checks.that(done.returncode == 0 and f"nightweigh {command}" in done.stdout, f"{command} --help", done.stdout)
    done = run(program, "--help")
    checks.that(done.returncode == 0 and all(command in done.stdout for command in COMMANDS), "--help names them all")
    checks.equal(run(program, "--version").returncode, 0, "--version")

    # A restart answers at once, with the same heads, and takes nothing twice.
    with Service(program, settings, data_dir) as service:
        began = time.monotonic()
        service.start()
        seconds = time.monotonic() - began
        checks.that(seconds < 5, "restart", f"{seconds:.2f} s")
        checks.equal(heads(service, BOOKS), final, "heads after a restart")
        code, seconds = service.end(signal.SIGINT)
        checks.that(code == 0 and seconds < STOP_LIMIT_S, "INT at rest", (code, seconds))
    return final


def every_night(checks, service, dates):
    worst = 0.0
    for book in BOOKS:
        sound, keys = True, None
        for number, day in enumerate(dates, 1):
            night = service.night(book, day)  # the reader refuses NaN and Infinity
            keys = keys or set(night)
            sums = [night[name] for name in WEIGHT_OBJECTS if night[name] is not None]
            sums += [night["emitted"]["weights"]] if night["emitted"] else []
            for weights in sums:
                off = abs(sum(weights.values()) - 1)
                worst = max(worst, off)
                sound &= off <= 1e-12 and min(weights.values()) >= 0 and "CASH" in weights
            sound &= night["night"] == number and night["date"] == day and set(night) == keys
            sound &= (night["sheet"] is not None) == (night["verdict"] == "move")
            cash, positions = night["account"]["cash"]["EUR"], night["account"]["positions"]
            sound &= float(cash) >= 0 and all(float(q) >= 0 for q in positions.values())
            if not sound:
                checks.that(False, f"night {book} {day}", json.dumps(night)[:2000])
                return
        checks.that(sound, f"every night of {book}: weights, members, holdings")
    print(f"  {len(dates)} nights of each book; the sums of weights are off by at most {worst:.2g}")


def the_log(checks, service, dates):
    for book in BOOKS:
        seen, target, pages = [], f"/v1/books/{book}/log?limit=100", 0
        while target:
            answer = service.get(target)
            body = answer.json()
            pages += 1
            seen += [row["date"] for row in body["rows"]]
            link = answer.headers.get("Link")
            checks.equal(link is None, body["next"] is None, f"log of {book}, page {pages}: Link and next agree")
            found = re.fullmatch(r"<([^>]+)>; rel=\"next\"", link) if link else None
            checks.that(found or link is None, f"log of {book}, page {pages}: form of Link", link)
            target = found.group(1) if found else None
        checks.equal(pages, 8, f"log of {book}: pages")
        checks.equal(seen, dates[::-1], f"log of {book}: each night once, newest first")
        split = {}
        for verdict in ("move", "stay", "withheld"):
            rows = service.get(f"/v1/books/{book}/log?verdict={verdict}&limit=1000").json()["rows"]
            split[verdict] = [row["date"] for row in rows]
        checks.equal(sorted(sum(split.values(), [])), dates, f"log of {book}: the verdicts together are all nights")
        checks.that(len(split["move"]) > 1 and len(split["stay"]) > 100, f"log of {book}: moves and stays")
        window = service.get(f"/v1/books/{book}/log?from={dates[100]}&to={dates[119]}").json()
        checks.equal([row["date"] for row in window["rows"]], dates[100:120][::-1], f"log of {book}: from and to")
        first = service.get(f"/v1/books/{book}/log?limit=1").json()["rows"][0]
        members = ["date", "verdict", "reason", "growth_saved_bp_year", "cost_bp", "payback_days", "horizon_days",
                   "turnover", "lines", "sheet", "reviewed_by", "batch", "hash"]
        checks.that(set(members) <= set(first), f"log of {book}: members of a row", sorted(first))


def problems(checks, service):
    for target, status in (
        ("/v1/books/none", 404), ("/v1/books/none/target", 404), ("/v1/books/none/log", 404), ("/nothing", 404),
        ("/v1/books/harbour/nights/2020-01-01", 404), ("/v1/books/harbour/nights/yesterday", 400),
        ("/v1/books/harbour/log?limit=0", 400), ("/v1/books/harbour/log?limit=1001", 400),
        ("/v1/books/harbour/log?limit=ten", 400), ("/v1/books/harbour/log?cursor=x", 400),
        ("/v1/books/harbour/log?from=2024-02-30", 400), ("/v1/books/harbour/log?verdict=fly", 400),
        ("/v1/books/harbour/log?colour=red", 400),
    ):
        answer = service.get(target)
        checks.equal((answer.status, answer.headers["Content-Type"]), (status, "application/problem+json"), target)
        body = answer.json()
        checks.that(body["status"] == status and body["title"] and body["detail"], f"{target}: the document", body)
    answer = service.get("/v1/books")
    checks.equal([book["book"] for book in answer.json()["books"]], BOOKS, "/v1/books")
    tag = service.get("/v1/books/harbour/target").headers.get("ETag")
    checks.that(tag, "an ETag stands in the answer")
    checks.equal(service.get("/v1/books/harbour/target", {"If-None-Match": tag or "x"}).status, 304, "If-None-Match")
    checks.that(service.get("/healthz", {"Host": "elsewhere.example"}).status in (400, 403, 421), "a foreign Host is refused")
    checks.equal(service.get("/healthz").json(), {"status": "ok"}, "/healthz")


# ---- one long batch

LONG_INSTRUMENTS = [f"LINE-{i:02}" for i in range(60)]
LONG_DAYS = weekdays("2019-01-01", 1000)
LONG_BOOKS = ["quiet", "lively", "narrow"]


def long_settings():
    instruments = "".join(f"  - {{id: {name}, currency: EUR, lot_size: 1}}\n" for name in LONG_INSTRUMENTS)
    books = ""
    for name, lines, rule in (
        ("quiet", LONG_INSTRUMENTS, "{rule: constant_mix}"),
        ("lively", LONG_INSTRUMENTS, "{rule: exponentiated_gradient, eta: 0.1}"),
        ("narrow", LONG_INSTRUMENTS[:12], "{rule: exponentiated_gradient, eta: 0.05}"),
    ):
        books += (
            f"  - name: {name}\n    currency: EUR\n    instruments: [{', '.join(lines)}]\n"
            f"    start: {{date: {LONG_DAYS[0]}, cash: {{EUR: \"50000000.00\"}}, holdings: {{}}}}\n"
            f"    strategy: {rule}\n    execution: assumed\n"
        )
    return (
        "service:\n  data_dir: ./var\n  http: \"127.0.0.1:0\"\n  feed_socket: \"127.0.0.1:0\"\n  log_level: warn\n"
        f"instruments:\n{instruments}books:\n{books}"
    )


def long_csv():
    source = random.Random(11)
    prices = [source.uniform(20, 200) for _ in LONG_INSTRUMENTS]
    lines = ["date,instrument,close"]
    for day in LONG_DAYS:
        common = source.gauss(0.0002, 0.008)
        for i, name in enumerate(LONG_INSTRUMENTS):
            prices[i] = max(1.0, prices[i] * (1 + common + source.gauss(0, 0.012)))
            lines.append(f"{day},{name},{prices[i]:.2f}")
    return "\n".join(lines) + "\n"


def prepared(folder, name):
    target = os.path.join(folder, name)
    os.makedirs(target)
    path = os.path.join(target, "nightweigh.yaml")
    with open(path, "w", encoding="utf-8") as file:
        file.write(long_settings())
    return path, os.path.join(target, "var")


def nights_done(service, book):
    return service.book(book)["nights"]


class Prober:
    """Asks /healthz on a connection of its own and notes how long each answer took."""

    def __init__(self, endpoint):
        self.host, port = endpoint.rsplit(":", 1)
        self.port, self.ended, self.latencies, self.wrong = int(port), False, [], []
        self.thread = threading.Thread(target=self.ask)
        self.thread.start()

    def ask(self):
        request = f"GET /healthz HTTP/1.1\r\nHost: {self.host}:{self.port}\r\nConnection: close\r\n\r\n".encode()
        while not self.ended:
            began = time.monotonic()
            try:
                with socket.create_connection((self.host, self.port), timeout=30) as one:
                    one.sendall(request)
                    answer = b""
                    while part := one.recv(4096):
                        answer += part
                if not answer.startswith(b"HTTP/1.1 200"):
                    self.wrong.append(answer[:100])
            except OSError as error:
                self.wrong.append(str(error))
            self.latencies.append(time.monotonic() - began)
            time.sleep(0.01)

    def finish(self):
        self.ended = True
        self.thread.join()
        return sorted(self.latencies)


def long_batch(checks, program, folder, seed):
    data = long_csv()
    settings, data_dir = prepared(folder, "long")
    with Service(program, settings, data_dir).start() as service:
        prober = Prober(service.endpoints["http"])
        began = time.monotonic()
        put(os.path.join(data_dir, "drop", "all.csv"), data)
        slowest = 0.0
        while any(nights_done(service, book) < len(LONG_DAYS) for book in LONG_BOOKS):
            asked = time.monotonic()
            service.get("/v1/books/narrow")
            slowest = max(slowest, time.monotonic() - asked)
            if time.monotonic() - began > 300:
                raise RuntimeError("the long batch is not done within 300 s")
            time.sleep(0.02)
        seconds = time.monotonic() - began
        latencies = prober.finish()
        checks.equal(prober.wrong, [], "every /healthz during the long batch is 200")
        checks.that(len(latencies) > 20, "enough questions were asked during the long batch", len(latencies))
        checks.that(latencies[-1] < LATENCY_LIMIT_S, "slowest /healthz during the long batch", f"{latencies[-1]:.3f} s")
        checks.that(slowest < LATENCY_LIMIT_S, "slowest book answer during the long batch", f"{slowest:.3f} s")
        uninterrupted = heads(service, LONG_BOOKS)
        wait_until(lambda: os.path.exists(os.path.join(data_dir, "drop", "accepted", "all.csv")), 30, "all.csv moves")
        service.end()
    print(f"  {3 * len(LONG_DAYS)} nights in {seconds:.1f} s; /healthz asked {len(latencies)} times, median "
          f"{1e3 * latencies[len(latencies) // 2]:.1f} ms, slowest {1e3 * latencies[-1]:.1f} ms")

    settings, data_dir = prepared(folder, "stopped")
    with Service(program, settings, data_dir).start() as service:
        put(os.path.join(data_dir, "drop", "all.csv"), data)
        for number, share in ((signal.SIGTERM, 0.05), (signal.SIGINT, 0.35), (signal.SIGTERM, 0.6)):
            wait_until(lambda share=share: nights_done(service, "narrow") >= share * len(LONG_DAYS), 120, "nights")
            before = nights_done(service, "narrow")
            code, seconds = service.end(number)
            checks.equal(code, 0, f"{number.name} in the middle: exit code")
            checks.that(seconds < STOP_LIMIT_S, f"{number.name} in the middle: ends in time", f"{seconds:.2f} s")
            service.start()
            after = nights_done(service, "narrow")
            checks.that(before <= after, f"{number.name} in the middle: no night is lost", (before, after))
            print(f"  {number.name} after {before} nights: ended in {seconds:.2f} s")
        wait_until(lambda: all(nights_done(service, b) == len(LONG_DAYS) for b in LONG_BOOKS), 200, "the rest")
        checks.equal(heads(service, LONG_BOOKS), uninterrupted, "stopped three times: the heads of the whole run")
        wait_until(lambda: os.path.exists(os.path.join(data_dir, "drop", "accepted", "all.csv")), 60, "all.csv moves")
        service.end()


# ---- crashes

KILLS = 30  # at most; fewer where the work is done earlier

def crashes(checks, program, folder, seed, expected):
    """Ended by kill -9 in the middle, again and again. `expected`: the heads of the demo's uninterrupted run."""
    source = random.Random(seed)
    folder = os.path.join(folder, "crashes")
    settings, data_dir, days = scenario(program, folder)
    dates = sorted(days)
    drop = os.path.join(data_dir, "drop")
    service = Service(program, settings, data_dir)
    with service:
        # In the first moments: the database is being made, the folders too.
        for _ in range(8):
            service.spawn()
            time.sleep(source.uniform(0, 0.08))
            service.end(signal.SIGKILL)
        os.makedirs(drop, exist_ok=True)
        for path in glob.glob(os.path.join(folder, "closes", "*.csv")):
            shutil.copyfile(path, os.path.join(drop, os.path.basename(path)))
        seen, kills = 0, 0
        while True:
            service.start()
            done = service.book("harbour")["nights"]
            checks.that(done >= seen, f"kill {kills}: no night that was seen is lost", (seen, done))
            seen = done
            deadly = kills < KILLS and done < len(dates) - 5
            if deadly:
                kills += 1
                process = service.process
                killer = threading.Timer(source.uniform(0.0, 0.25), process.kill)
                killer.start()
            try:
                # The same closes over the socket, from where the nights are.
                with service.feeder() as feeder:
                    for day in dates[max(0, done - 2):]:
                        feeder.send(closes_line(days[day]))
                        seen = max(seen, service.book("harbour")["nights"])
            except (OSError, ValueError, http.client.HTTPException):
                if not deadly:
                    raise
            if not deadly:
                break
            killer.join()
            service.process.wait()
            service.drop_connection()
        checks.that(kills >= 3, "enough kills came before the end", kills)
        wait_until(lambda: all(nights_done(service, book) == len(dates) for book in BOOKS), 120, "all nights")
        wait_until(lambda: not glob.glob(os.path.join(drop, "*.csv")), 60, "the drop folder is empty")
        checks.equal(heads(service, BOOKS), expected, f"killed {8 + kills} times (seed {seed}): the heads of the whole run")
        print(f"  killed 8 times in the first moments and {kills} times in the middle of nights")
        checks.equal(os.listdir(os.path.join(drop, "refused")), [], "nothing was refused")
        code, _ = service.end()
        checks.equal(code, 0, "after all crashes: ends well")
    report = read_json(run(program, "inspect", "--settings", settings, "--json").stdout)
    checks.equal(report["problems"], [], "after all crashes: inspect finds nothing")


# ---- any order

def any_order(checks, program, folder, seed):
    source = random.Random(seed)
    base = os.path.join(folder, "ordered")
    settings, data_dir, days = scenario(program, base)
    dates = sorted(days)[:40]

    def in_order(service):
        with service.feeder() as feeder:
            for day in dates:
                checks.equal(feeder.send(closes_line(days[day]))["status"], "taken", f"in order: {day}")

    with Service(program, settings, data_dir).start() as service:
        in_order(service)
        expected = heads(service, BOOKS)
        service.end()

    def pieces():
        """Each day whole or cut into pieces, some twice, shuffled."""
        out = []
        for day in dates:
            rows = list(days[day])
            source.shuffle(rows)
            cuts = sorted(source.sample(range(1, len(rows)), source.choice([0, 0, 1, 2])))
            parts = [rows[a:b] for a, b in zip([0, *cuts], [*cuts, len(rows)])]
            out += parts + [part for part in parts if source.random() < 0.3]
        source.shuffle(out)
        return out

    for number in range(4):
        folder_now = os.path.join(folder, f"shuffled-{number}")
        settings, data_dir, _ = scenario(program, folder_now)
        service = Service(program, settings, data_dir)
        with service.start():
            batches = pieces() if number else [days[day] for day in reversed(dates)]
            crash_at = len(batches) // 2 if number == 3 else -1
            feeder = service.feeder()
            for index, rows in enumerate(batches):
                if index == crash_at:
                    feeder.close()
                    service.end(signal.SIGKILL)
                    service.start()
                    feeder = service.feeder()
                if number == 2 and index % 4 == 0:
                    where, why = service.drop(f"part-{index:03}.json", closes_line(rows))
                    checks.equal(where, "accepted", f"shuffle {number}, piece {index} by file: {why}")
                    continue
                answer = feeder.send(closes_line(rows))
                checks.that(answer["status"] in ("taken", "known"), f"shuffle {number}, piece {index}", answer)
            feeder.close()
            found = heads(service, BOOKS)
            checks.equal(found, expected, f"shuffle {number} of {len(batches)} batches (seed {seed}): the same heads")
            service.end()


def main():
    checks = Checks()
    program = os.path.abspath(sys.argv[1])
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else int.from_bytes(os.urandom(4), "little")
    print(f"seed {seed}", flush=True)
    began = time.monotonic()
    with tempfile.TemporaryDirectory(prefix="nightweigh-service-") as folder:
        expected = demo(checks, program, folder, seed)
        print(f"demo: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
        crashes(checks, program, folder, seed, expected)
        print(f"crashes: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
        for part in (any_order, long_batch):
            part(checks, program, folder, seed)
            print(f"{part.__name__}: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
    return checks.finish()


if __name__ == "__main__":
    sys.exit(main())
