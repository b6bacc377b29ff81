#!/usr/bin/python3
"""Bad input against a live service: what it answers, what it keeps, and that it goes on.

usage: bad_input.py PATH_TO_NIGHTWEIGH

CLOSES is one table. Each row is delivered by every way that it applies to: as a line on the feed socket, as a
.json file and as a .csv file in the drop folder. Each time:
  - the answer is the one of the table, in the same words on every way; a file lies in drop/refused/ with a
    reason file that holds those words;
  - the head of the book's journal and its number of nights are unchanged;
  - the next good batch is taken and becomes a night. It carries other values than the good rows that the bad
    batch held beside its bad one, so it would be refused as a conflict had anything been kept.
Then: batches sent twice, out of order, cut in the middle, conflicting, correcting; lines that are hostile;
settings (exit code 2, file:line:column on standard error); databases from the future, locked, truncated;
addresses and folders in use. Uses the standard library only. Exit 0: all as it should be.
"""
import os
import re
import shutil
import socket
import sqlite3
import sys
import tempfile
import time
from datetime import date, timedelta

sys.dont_write_bytecode = True  # the source folder stays as it is
from live import Checks, Feeder, Service, closes_line, digest_of, put, read_json, run, weekdays  # noqa: E402

DAYS = weekdays("2024-01-01", 400)
INSTRUMENTS = ["ALDER", "BRINE", "COPPER"]
NUMBER_REMEDY = "Write a decimal number like 61.20"
POSITIVE_REMEDY = "Write a close above zero, or leave the row out where there is none"
COLUMNS_REMEDY = "Leave it out; the columns are date, instrument, close, revision, dividend, split"
FORM = 'Send one JSON object, {"closes":[{"date":"2026-03-02","instrument":"ALDER","close":"61.20"}]}'
EVERY_WAY = ("socket", "json", "csv")

SETTINGS = """service:
  data_dir: ./var
  http: "127.0.0.1:0"
  feed_socket: "127.0.0.1:0"
  log_level: warn
instruments:
  - {id: ALDER, currency: EUR}
  - {id: BRINE, currency: EUR}
  - {id: COPPER, currency: EUR}
  - {id: SPARE, currency: EUR}
books:
  - name: harbour
    currency: EUR
    instruments: [ALDER, BRINE, COPPER]
    start: {date: 2024-01-01, cash: {EUR: "1000000.00"}, holdings: {}}
    strategy: {rule: exponentiated_gradient, eta: 0.05}
    execution: assumed
"""


def a_coming_weekday():
    day = date.today() + timedelta(days=10)
    while day.weekday() >= 5:
        day += timedelta(days=1)
    return day.isoformat()


FUTURE = a_coming_weekday()
MISSING = object()


class Case:
    """One mistake in the first row of a batch that is good otherwise. `change`: columns and their values
    (MISSING takes the column away). The expected answer: row, column, value, problem, remedy, kind."""

    def __init__(self, name, change, column, value, problem, remedy, kind="bad_input", ways=EVERY_WAY, row=1,
                 csv_words=None, csv_row=None):
        self.name, self.change, self.ways, self.kind = name, change, ways, kind
        self.row, self.column, self.value, self.problem, self.remedy = row, column, value, problem, remedy
        self.csv_row = csv_row if csv_row is not None else row
        self.csv_words = csv_words or (value, problem, remedy)


CLOSES = [
    Case("text in a number", {"close": "abc"}, "close", "abc", "is not a decimal number", NUMBER_REMEDY),
    Case("text behind a number", {"close": "61.20EUR"}, "close", "61.20EUR", "is not a decimal number",
         NUMBER_REMEDY),
    Case("a decimal comma", {"close": "61,20"}, "close", "61,20", "has a comma",
         "Write a decimal point and no digit grouping, as in 61.20 or 1234.50"),
    Case("an exponent", {"close": "6e1"}, "close", "6e1", "is written with an exponent",
         "Write the number out, as in 100000 for 1e5"),
    Case("an empty number", {"close": ""}, "close", "", "is empty", NUMBER_REMEDY),
    Case("zero", {"close": "0.00"}, "close", "0.00", "is zero", POSITIVE_REMEDY),
    Case("negative", {"close": "-61.20"}, "close", "-61.20", "is negative", POSITIVE_REMEDY),
    Case("infinite", {"close": "inf"}, "close", "inf", "is not a finite number",
         "Write a decimal number like 61.20, or leave the row out where there is no close"),
    Case("not a number", {"close": "NaN"}, "close", "NaN", "is not a finite number",
         "Write a decimal number like 61.20, or leave the row out where there is no close"),
    Case("too many digits", {"close": "1" * 40}, "close", "1" * 40,
         "has more than 12 digits before the point or more than 10 after it",
         "Write at most 12 digits before and 10 after the decimal point"),
    Case("missing column", {"close": MISSING}, "close", "", "is missing",
         "Give date, instrument and close in every row",
         csv_words=("", "is missing from the header row", "Give the columns date, instrument and close"), csv_row=0),
    Case("extra column", {"colour": "red"}, "colour", "", "is an unknown column", COLUMNS_REMEDY, csv_row=0),
    Case("a column of a later version", {"volume": "1200"}, "volume", "",
         "this version does not read the column volume", "Leave it out", kind="not_built", csv_row=0),
    Case("unknown instrument", {"instrument": "ZINC"}, "instrument", "ZINC", "is held by no book",
         "look for a typing mistake, or add it to the settings"),
    Case("an instrument that no book holds", {"instrument": "SPARE"}, "instrument", "SPARE", "is held by no book",
         "look for a typing mistake, or add it to the settings"),
    Case("an instrument in lower case", {"instrument": "alder"}, "instrument", "alder",
         "is not the form of an instrument's id",
         "Write the id as in the settings: 1 to 32 of A-Z 0-9 . _ -, starting with a letter or a digit"),
    Case("future date", {"date": FUTURE}, "date", FUTURE,
         "lies in the future by the time zone of every book that holds ALDER",
         "deliver a close after its day; look at the clock of the data job and of this machine"),
    Case("non-trading day", {"date": "2024-01-06"}, "date", "2024-01-06",
         "is no trading day of any book that holds ALDER", "leave the row out, or change the book's calendar"),
    Case("a date before the start", {"date": "2023-12-29"}, "date", "2023-12-29",
         "lies before the start of every book that holds ALDER", "leave earlier rows out"),
    Case("no day of the calendar", {"date": "2024-02-30"}, "date", "2024-02-30", "is not a day of the calendar",
         "Correct the month or the day"),
    Case("a date of another form", {"date": "02.01.2024"}, "date", "02.01.2024", "is not an ISO 8601 date",
         "Write it as YYYY-MM-DD, like 2026-03-02, and nothing after it"),
    Case("a revision that is no number", {"revision": "second"}, "revision", "second",
         "is not a whole number from 0 to 999999",
         "Write 0 or leave it empty for the first value, 1 for the first correction"),
    Case("a negative dividend", {"dividend": "-0.5"}, "dividend", "-0.5", "is negative",
         "Write the cash a share going ex that day, or leave it empty"),
    Case("a split of zero", {"split": "0"}, "split", "0", "is zero",
         "Write the new shares for one old share, or leave it empty where there is no split"),
]


def to_csv(rows):
    columns = []
    for row in rows:
        columns += [name for name in row if name not in columns]

    def field(text):
        return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',"\r\n') else text

    lines = [",".join(columns)] + [",".join(field(row.get(name, "")) for name in columns) for row in rows]
    return "\n".join(lines) + "\n"


def message_of(error):
    """As the reason file writes it."""
    place = f"row {error['row']}" if error["row"] else ""
    if error["column"]:
        place += (", " if place else "") + f"column {error['column']}"
    text = (place or "the batch") + ": " + error["problem"]
    text += f': "{error["value"]}"' if error["value"] else ""
    return text + (f". {error['remedy']}" if error["remedy"] else "")


class Bench:
    """The live service and the days that it has been fed so far."""

    def __init__(self, checks, service):
        self.checks, self.service, self.at, self.files = checks, service, 0, 0
        self.feeder = service.feeder()

    def rows(self, day=None, price=50.0):
        day = day or DAYS[self.at]
        return [
            {"date": day, "instrument": name, "close": f"{price + 7 * i + self.at % 5 / 4:.2f}"}
            for i, name in enumerate(INSTRUMENTS)
        ]

    def next_name(self, extension):
        self.files += 1
        return f"batch-{self.files:04}.{extension}"

    def state(self):
        book = self.service.book("harbour")
        return book["journal"], book["nights"], book["date"], book["attention"]

    def feed_good(self, what):
        """The next day is taken and becomes a night."""
        answer = self.feeder.send(closes_line(self.rows()))
        expected = [{"book": "harbour", "result": "night", "dates": [DAYS[self.at]], "reasons": []}]
        self.checks.that(
            answer["status"] == "taken" and answer["rows"] == 3 and answer["books"] == expected,
            f"{what}: the next good batch is taken", answer,
        )
        self.at += 1

    def refuse(self, what, way, data, errors):
        """Delivers bytes; `errors` (None: only those of the kind matter) must be the answer."""
        before = self.state()
        data = data if isinstance(data, bytes) else data.encode()
        if way == "socket":
            answer = self.feeder.send(data)
            self.checks.equal(
                (answer["status"], answer["rows"], answer["books"]), ("refused", 0, []), f"{what}: refused"
            )
            self.checks.equal(plain(answer["errors"]), plain(errors), f"{what}: the answer")
            self.checks.equal(answer["digest"], digest_of(data), f"{what}: the digest")
        else:
            name = self.next_name(way)
            where, reason = self.service.drop(name, data)
            self.checks.equal(where, "refused", f"{what}: the file's place")
            expected = [f"{name} was refused: nothing of it was stored.", f"digest {digest_of(data)}"]
            self.checks.equal(
                reason.lower().splitlines(), [line.lower() for line in expected + [message_of(e) for e in errors]],
                f"{what}: the reason file"
            )
            with open(os.path.join(self.service.data_dir, "drop", "refused", name), "rb") as file:
                self.checks.that(file.read() == data, f"{what}: the refused file is kept byte for byte")
        self.checks.equal(self.state(), before, f"{what}: journal and nights unchanged")
        self.feed_good(what)


def plain(errors):
    """Remedies may begin with a small or a capital letter."""
    return [dict(e, remedy=e["remedy"][:1].lower() + e["remedy"][1:]) for e in errors]


def says(reason, wanted):
    """The reason file holds this error's line, whatever the case of its letters."""
    return message_of(wanted).lower() in reason.lower().splitlines()


def error(row, column, value, problem, remedy, kind="bad_input"):
    return {"row": row, "column": column, "value": value, "problem": problem, "remedy": remedy, "kind": kind}


def table_of_closes(bench):
    for case in CLOSES:
        for way in case.ways:
            rows = bench.rows(price=40.0)  # other values than the good batch will have
            for column, value in case.change.items():
                if value is MISSING:
                    for row in rows if way == "csv" else rows[:1]:
                        del row[column]
                else:
                    rows[0][column] = value
            value, problem, remedy = case.csv_words if way == "csv" else (case.value, case.problem, case.remedy)
            number = case.csv_row if way == "csv" else case.row
            data = to_csv(rows) if way == "csv" else closes_line(rows)
            bench.refuse(f"{case.name} by {way}", way, data, [error(number, case.column, value, problem, remedy,
                                                                    case.kind)])


def more_bad_batches(bench):
    # Every mistake is named at once, in the order of the rows.
    for way in EVERY_WAY:
        rows = bench.rows()
        rows[0]["close"], rows[1]["close"], rows[2]["date"] = "0", "x", "yesterday"
        bench.refuse(
            f"three mistakes by {way}", way, to_csv(rows) if way == "csv" else closes_line(rows),
            [error(1, "close", "0", "is zero", POSITIVE_REMEDY),
             error(2, "close", "x", "is not a decimal number", NUMBER_REMEDY),
             error(3, "date", "yesterday", "is not an ISO 8601 date",
                   "Write it as YYYY-MM-DD, like 2026-03-02, and nothing after it")],
        )
    # The same row twice with another value.
    for way in EVERY_WAY:
        rows = bench.rows(price=40.0)
        rows.append(dict(rows[0], close="40.01"))
        bench.refuse(
            f"duplicate row with another value by {way}", way, to_csv(rows) if way == "csv" else closes_line(rows),
            [error(4, "close", "40.01",
                   f"contradicts row 1, which says {float(rows[0]['close']):g} for ALDER on {rows[0]['date']}, "
                   "revision 0", "Keep one of the two rows; a correction carries a higher revision")],
        )
    # Wrong encoding: the byte is named; a .csv row is too.
    for way in ("socket", "json"):
        bad = closes_line(bench.rows()).encode().replace(b"BRINE", b"BR\xcfNE")
        bench.refuse(f"wrong encoding by {way}", way, bad, [error(
            0, "", "\\xcfNE\",...", f"is not valid UTF-8 at byte {bad.index(0xcf) + 1}",
            "Write it as UTF-8, not as Latin-1 or another encoding")])
    bad = to_csv(bench.rows()).encode().replace(b"BRINE", b"BR\xcfNE")
    bench.refuse("wrong encoding by csv", "csv", bad, [error(
        2, "", "\\xcf" + bad.partition(b"\xcf")[2][:4].decode() + "...",
        f"is not valid UTF-8 at byte {bad.index(0xcf) + 1}",
        "Write it as UTF-8, not as Latin-1 or another encoding")])
    for encoding in ("utf-16-le", "utf-16"):
        data = to_csv(bench.rows()).encode(encoding)
        name = bench.next_name("csv")
        before = bench.state()
        where, reason = bench.service.drop(name, data)
        bench.checks.that(where == "refused" and "looks like UTF-16 text" in reason, f"{encoding} by csv", reason)
        bench.checks.equal(bench.state(), before, f"{encoding} by csv: journal unchanged")
        bench.feed_good(f"{encoding} by csv")
    # Infinity and NaN as bare words are no JSON; a number beyond every double is none that is a price.
    for word in ("Infinity", "-Infinity", "NaN"):
        for way in ("socket", "json"):
            text = closes_line(bench.rows()).replace('"close":"', '"close":', 1)
            text = re.sub(r'"close":[0-9.]+"', f'"close":{word}', text, count=1)
            before = bench.state()
            data = text.encode()
            if way == "socket":
                errors = bench.feeder.send(data)["errors"]
                words = message_of(errors[0]) if len(errors) == 1 else str(errors)
            else:
                where, words = bench.service.drop(bench.next_name(way), data)
                bench.checks.equal(where, "refused", f"{word} by {way}: the file's place")
            bench.checks.that(
                "row 1: is not valid JSON at byte" in words and "JSON has no NaN and no Infinity" in words,
                f"{word} by {way}: the answer", words,
            )
            bench.checks.equal(bench.state(), before, f"{word} by {way}: journal unchanged")
            bench.feed_good(f"{word} by {way}")
    for way in ("socket", "json"):
        rows = bench.rows()
        text = closes_line(rows).replace('"' + rows[0]["close"] + '"', "1e999", 1)
        before = bench.state()
        if way == "socket":
            words = message_of(bench.feeder.send(text)["errors"][0])
        else:
            words = bench.service.drop(bench.next_name(way), text)[1]
        bench.checks.that("has a number far beyond every price" in words, f"1e999 by {way}", words)
        bench.checks.equal(bench.state(), before, f"1e999 by {way}: journal unchanged")
        bench.feed_good(f"1e999 by {way}")
    # Keys that stand twice.
    for way in ("socket", "json"):
        rows = bench.rows()
        text = closes_line(rows).replace('"instrument":"BRINE"', '"instrument":"BRINE","instrument":"BRINE"')
        bench.refuse(f"duplicate key in a row by {way}", way, text, [
            error(2, "instrument", "", "stands twice in one object", "Keep one of the two")])
        text = closes_line(bench.rows())
        text = text[:-1] + "," + text[1:]
        bench.refuse(f"duplicate closes by {way}", way, text, [
            error(0, "closes", "", "stands twice in one object", "Keep one of the two")])
    # A million brackets, bare and where rows should be.
    deep = error(1, "", "", "nests deeper than 32 levels", FORM, "limit")
    for way in ("socket", "json"):
        bench.refuse(f"a million brackets by {way}", way, "[" * 1_000_000, [
            error(0, "", "", "is an array, not an object", FORM)])
        bench.refuse(f"a million brackets as closes by {way}", way, '{"closes":' + "[" * 1_000_000, [
            error(1, "", "", "is an array, not an object",
                  "Write each row as an object with date, instrument and close"), deep])
        bench.refuse(f"a million objects by {way}", way, '{"a":' * 1_000_000, [
            error(0, "a", "", "is an unknown key", FORM), dict(deep, row=0)])
    # Cut in the middle of the text.
    for way in ("socket", "json"):
        text = closes_line(bench.rows())[:-30]
        bench.refuse(f"cut JSON by {way}", way, text, [
            error(3, "", "", f"ends in the middle of the JSON text at byte {len(text) + 1}", FORM)])
    rows = to_csv(bench.rows())
    bench.refuse("cut csv", "csv", rows[: rows.rindex(",")], [
        error(3, "", "", "has 2 fields where the header has 3",
              "Write one field for each column, empty where there is no value")])
    bench.refuse("a header and no row by csv", "csv", "date,instrument,close\n", [
        error(0, "", "", "has no rows", "Send at least one close")])
    for way in ("socket", "json"):
        bench.refuse(f"no row by {way}", way, '{"closes":[]}', [
            error(0, "", "", "has no rows", "Send at least one close")])


def unnamed_and_ignored_files(bench):
    checks, service = bench.checks, bench.service
    folder = os.path.join(service.data_dir, "drop")
    before = bench.state()
    where, reason = service.drop("notes.txt", "hello")
    checks.that(where == "refused" and "the file is neither .csv nor .json" in reason, "a .txt file is refused", reason)
    for name in (".hidden.csv", "closes.csv.part", "closes.csv.tmp"):
        with open(os.path.join(folder, name), "w", encoding="utf-8") as file:
            file.write(to_csv(bench.rows()))
    time.sleep(0.6)
    for name in (".hidden.csv", "closes.csv.part", "closes.csv.tmp"):
        checks.that(os.path.exists(os.path.join(folder, name)), f"{name} is left alone")
        os.remove(os.path.join(folder, name))
    # A name that is taken in refused/ gets a number; nothing is overwritten.
    path = os.path.join(folder, "notes.txt")
    put(path, "hello again")
    deadline = time.monotonic() + 20
    while os.path.exists(path) and time.monotonic() < deadline:
        time.sleep(0.01)
    with open(os.path.join(folder, "refused", "notes.txt"), encoding="utf-8") as file:
        checks.equal(file.read(), "hello", "the first refused file is not overwritten")
    checks.that(os.path.exists(os.path.join(folder, "refused", "notes-2.txt")), "the second one has a number",
                os.listdir(os.path.join(folder, "refused")))
    checks.equal(bench.state(), before, "ignored and unnamed files: journal unchanged")
    bench.feed_good("ignored and unnamed files")


def repeated_and_misordered(bench):
    checks, service = bench.checks, bench.service
    # Sent twice: the same bytes, and the same rows in other bytes.
    line = closes_line(bench.rows())
    bench.feed_good("first of two")
    before = bench.state()
    known = {"status": "known", "rows": 0, "errors": [],
             "books": [{"book": "harbour", "result": "waiting", "dates": [],
                        "reasons": [f"nothing new: the next night is {DAYS[bench.at]}"]}]}
    for name, again in (("sent twice", line), ("the same rows in other bytes", line.replace(",", " , "))):
        answer = bench.feeder.send(again)
        checks.equal(answer.pop("digest"), digest_of(again.encode()), f"{name} by socket: the digest")
        checks.equal(answer, known, f"{name} by socket")
        checks.equal(service.drop(bench.next_name("json"), again)[0], "accepted", f"{name} by json")
    rows = read_json(line)["closes"]
    checks.equal(service.drop(bench.next_name("csv"), to_csv(rows))[0], "accepted", "sent twice by csv")
    checks.equal(bench.state(), before, "sent twice: journal unchanged")
    bench.feed_good("sent twice")

    # Out of order by a day: the later one waits and the answer says for what; both nights follow.
    early, late = DAYS[bench.at], DAYS[bench.at + 1]
    for way in EVERY_WAY:
        early, late = DAYS[bench.at], DAYS[bench.at + 1]
        before = bench.state()
        rows = bench.rows(late)
        if way == "socket":
            answer = bench.feeder.send(closes_line(rows))
            checks.equal((answer["status"], answer["rows"]), ("taken", 3), "out of order by socket: stored")
            checks.equal(answer["books"], [{
                "book": "harbour", "result": "waiting", "dates": [],
                "reasons": [f"{early}: no close of any instrument yet, though closes of {late} are here; deliver "
                            "them, or list the date as no trading day in the calendar file"]}],
                "out of order by socket: waits, and says for what")
        else:
            data = to_csv(rows) if way == "csv" else closes_line(rows)
            checks.equal(service.drop(bench.next_name(way), data)[0], "accepted", f"out of order by {way}: stored")
        state = bench.state()
        checks.equal(state[:3], before[:3], f"out of order by {way}: no night yet")
        checks.that(len(state[3]) == 1 and state[3][0].startswith(f"{early}: no close of any instrument yet"),
                    f"out of order by {way}: attention", state[3])
        answer = bench.feeder.send(closes_line(bench.rows(early)))
        checks.equal(answer["books"], [{"book": "harbour", "result": "night", "dates": [early, late], "reasons": []}],
                     f"out of order by {way}: both nights follow")
        bench.at += 2
        bench.feed_good(f"out of order by {way}")

    # One close is missing: the book waits for it by name, later dates queue.
    day, after = DAYS[bench.at], DAYS[bench.at + 1]
    rows = bench.rows(day)
    answer = bench.feeder.send(closes_line(rows[:2]))
    checks.equal(answer["books"], [{"book": "harbour", "result": "waiting", "dates": [],
                                    "reasons": [f"{day}: no close of COPPER yet"]}], "a missing close is named")
    answer = bench.feeder.send(closes_line(bench.rows(after)))
    checks.equal(answer["books"][0]["result"], "waiting", "later dates queue")
    # A close that waits: another value without a higher revision is a conflict, with one it is a correction.
    before = bench.state()
    changed = dict(rows[0], close="77.77")
    stored = f"{float(rows[0]['close']):g}"
    conflict = error(1, "close", "77.77, revision 0",
                     f"differs from the stored close of ALDER on {day}, which is {stored}, revision 0",
                     "give a correction a higher revision", "conflict")
    checks.equal(plain(bench.feeder.send(closes_line([changed]))["errors"]), plain([conflict]), "conflict by socket")
    for way in ("json", "csv"):
        data = to_csv([changed]) if way == "csv" else closes_line([changed])
        where, reason = service.drop(bench.next_name(way), data)
        checks.that(where == "refused" and says(reason, conflict), f"conflict by {way}", reason)
    checks.equal(bench.state(), before, "conflict: journal unchanged")
    answer = bench.feeder.send(closes_line([dict(changed, revision="1")]))
    checks.equal((answer["status"], answer["rows"]), ("taken", 1), "a higher revision of a waiting close is taken")
    answer = bench.feeder.send(closes_line(rows[2:]))
    checks.equal(answer["books"][0]["dates"], [day, after], "the missing close frees both nights")
    used = {row["instrument"]: (row["close"], row["revision"]) for row in service.night("harbour", day)["closes"]}
    checks.equal(used["ALDER"], ("77.77", 1), "the night used the higher revision")
    bench.at += 2

    # A correction of a processed night is refused by name; so is a conflicting value for it.
    before = bench.state()
    correction = [dict(bench.rows(day)[1], close="66.60", revision="1")]
    refused = error(1, "revision", "1",
                    f"would correct the night of {day} of book harbour, which is processed; this version does not take "
                    "such corrections", "keep the row for a version that does, and leave it out now", "not_built")
    checks.equal(plain(bench.feeder.send(closes_line(correction))["errors"]), plain([refused]), "correction by socket")
    for way in ("json", "csv"):
        data = to_csv(correction) if way == "csv" else closes_line(correction)
        where, reason = service.drop(bench.next_name(way), data)
        checks.that(where == "refused" and says(reason, refused), f"correction by {way}", reason)
    correction[0]["revision"] = "0"
    answer = bench.feeder.send(closes_line(correction))
    checks.equal([e["kind"] for e in answer["errors"]], ["conflict"], "another value for a processed night")
    # One bad row among many good ones: nothing of the batch is kept.
    mixed = bench.rows(price=40.0) + correction
    answer = bench.feeder.send(closes_line(mixed))
    checks.equal((answer["status"], [e["row"] for e in answer["errors"]]), ("refused", [4]), "one bad row of four")
    checks.equal(bench.state(), before, "correction: journal unchanged")
    bench.feed_good("correction")


def cut_and_hostile(bench):
    checks, service = bench.checks, bench.service
    # The connection ends in the middle of a line, once politely and once with a reset.
    before = bench.state()
    for how in ("close", "reset"):
        cut = service.feeder()
        cut.socket.sendall(closes_line(bench.rows()).encode())  # a whole batch, but no newline
        if how == "reset":
            cut.socket.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\1\0\0\0\0\0\0\0")
        cut.close()
        time.sleep(0.3)
        checks.equal(bench.state(), before, f"disconnected in the middle ({how}): nothing happened")
    bench.feed_good("disconnected in the middle")

    # A file that is still being written stays; when it is finished it is taken.
    before = bench.state()
    path = os.path.join(service.data_dir, "drop", "slow.csv")
    text = to_csv(bench.rows())
    half = len(text) // 2
    with open(path, "w", encoding="utf-8") as file:
        file.write(text[:half])
        file.flush()
        past = time.time() - 60
        os.utime(path, (past, past))  # even an old modification time does not make it finished
        time.sleep(1.5)
        checks.that(os.path.exists(path), "a half-written file stays while it is open")
        checks.equal(bench.state(), before, "a half-written file: journal unchanged")
        file.write(text[half:])
    deadline = time.monotonic() + 20
    while os.path.exists(path) and time.monotonic() < deadline:
        time.sleep(0.02)
    checks.that(os.path.exists(os.path.join(service.data_dir, "drop", "accepted", "slow.csv")),
                "the finished file is taken")
    checks.equal(service.book("harbour")["date"], DAYS[bench.at], "the finished file became a night")
    bench.at += 1
    bench.feed_good("half-written file")

    # The other side has said all that it will say, in the middle of a line: it is told so.
    before = bench.state()
    half = service.feeder()
    half.socket.sendall(closes_line(bench.rows()).encode())
    half.socket.shutdown(socket.SHUT_WR)
    checks.equal(half.answer()["errors"],
                 [error(0, "", "", "the connection ended before the line did, so it was not taken",
                        "End every line with a newline and send it again")],
                 "a line that ends without a newline: the answer")
    half.close()
    checks.equal(bench.state(), before, "a line that ends without a newline: journal unchanged")
    bench.feed_good("a line that ends without a newline")

    # A line without end: the limit is said, the connection is closed within seconds, memory stays bounded.
    before = bench.state()
    endless = service.feeder()
    began = time.monotonic()
    try:
        while time.monotonic() - began < 30:
            endless.socket.sendall(b"x" * (1 << 20))
    except OSError:
        pass  # the other end has closed while we were still writing
    checks.that(time.monotonic() - began < 30, "a line without end: the connection is closed")
    endless.close()
    patient = service.feeder()
    patient.socket.sendall(b"x" * ((8 << 20) + 1))
    answer = patient.answer()
    checks.equal([e["kind"] for e in answer["errors"]], ["limit"], "a line of one byte too many: the answer")
    checks.equal(patient.reader.readline(), b"", "a line of one byte too many: the connection is closed")
    patient.close()
    with open(f"/proc/{service.process.pid}/status", encoding="utf-8") as file:
        peak_kb = int(re.search(r"VmHWM:\s+(\d+)", file.read()).group(1))
    checks.that(peak_kb < 400_000, "memory stays bounded", f"{peak_kb} kB at most")
    checks.equal(bench.state(), before, "a line without end: journal unchanged")
    bench.feed_good("a line without end")

    # Connections beyond the limit are told so; the service goes on.
    crowd = [service.feeder() for _ in range(70)]
    told = []
    for one in crowd:
        one.socket.settimeout(0.05)
        try:
            told.append(message_of(one.answer()["errors"][0]))
        except OSError:
            pass
    # 64 may be open, one of them the bench's.
    checks.equal(told, ["the batch: the service has its 64 connections already. Close one of them, or send again later"]
                 * 7, "connections beyond the limit are told so")
    for one in crowd:
        one.close()
    time.sleep(0.2)
    with Feeder(service.endpoints["feed"]) as fresh:
        checks.equal(fresh.send(closes_line(bench.rows()[:1]))["status"], "taken", "after the crowd")
    bench.feeder.send(closes_line(bench.rows()[1:]))
    bench.at += 1
    bench.feed_good("after the crowd")


def locked_while_running(bench):
    """Another process keeps the database for longer than the service waits."""
    checks, service = bench.checks, bench.service
    before = bench.state()
    holder = sqlite3.connect(os.path.join(service.data_dir, "nightweigh.db"), isolation_level=None)
    holder.execute("BEGIN IMMEDIATE")
    line = closes_line(bench.rows())
    answer = bench.feeder.send(line)
    checks.that(
        answer["status"] == "refused" and [e["kind"] for e in answer["errors"]] == ["busy"]
        and "the database is held by another process or connection" in answer["errors"][0]["problem"],
        "locked while running by socket", answer,
    )
    path = os.path.join(service.data_dir, "drop", "locked.csv")
    put(path, to_csv(bench.rows()))
    time.sleep(2.6)
    checks.that(os.path.exists(path), "locked while running by csv: the file stays")
    checks.equal(bench.state(), before, "locked while running: answers go on, journal unchanged")
    holder.execute("ROLLBACK")
    holder.close()
    deadline = time.monotonic() + 60
    while os.path.exists(path) and time.monotonic() < deadline:
        time.sleep(0.05)
    checks.that(os.path.exists(os.path.join(service.data_dir, "drop", "accepted", "locked.csv")),
                "locked while running by csv: tried again and taken")
    checks.equal(bench.feeder.send(line)["status"], "known", "locked while running: the same batch is known then")
    bench.at += 1
    bench.feed_good("locked while running")


def changed(old, new, count=1):
    if old not in SETTINGS:
        raise AssertionError(old)
    return SETTINGS.replace(old, new, count)


# name, text, what standard error must hold (after the file's name)
BAD_SETTINGS = [
    ("duplicate key", changed("    execution: assumed\n", "    execution: assumed\n    currency: EUR\n"),
     ':18:5 books[0].currency: stands twice: "currency". Keep one'),
    ("duplicate key at the top", SETTINGS + "instruments: []\n",
     ':18:1 instruments: stands twice: "instruments". Keep one'),
    ("unknown key", changed("    execution: assumed\n", "    execution: assumed\n    exekution: assumed\n"),
     ':18:5 books[0].exekution: is an unknown key: "exekution". Did you mean execution?'),
    ("alias", changed("  - {id: BRINE, currency: EUR}", "  - {id: BRINE, currency: *c}").replace(
        "{id: ALDER, currency: EUR}", "{id: ALDER, currency: &c EUR}"),
     ":8:27 instruments[1].currency: is an alias, which the settings do not take. Write the value out"),
    ("second document", SETTINGS + "---\nbooks: []\n", ":18:1: begins a second document. Keep one document a file"),
    ("unknown rule", changed("exponentiated_gradient", "exponential_gradient"),
     ':16:22 books[0].strategy.rule: is not known here: "exponential_gradient". Did you mean exponentiated_gradient?'),
    ("a rule of a later version", changed("exponentiated_gradient, eta: 0.05", "universal"),
     ":16:22 books[0].strategy.rule: "),
    ("instrument listed twice", changed("[ALDER, BRINE, COPPER]", "[ALDER, BRINE, ALDER]"),
     ':14:33 books[0].instruments[2]: is listed twice: "ALDER". List each instrument once'),
    ("instrument defined twice", changed("{id: SPARE,", "{id: ALDER,"), ':10:10 instruments[3].id: is defined twice'),
    ("weights not summing to one",
     changed("{rule: exponentiated_gradient, eta: 0.05}",
             "{rule: constant_mix, weights: {ALDER: 0.5, BRINE: 0.3, COPPER: 0.1}}"),
     ':16:45 books[0].strategy.weights: do not sum to 1: "0.9". Change them so that they do'),
]


def settings_that_are_bad(checks, program, folder, service):
    folder = os.path.join(folder, "settings")
    os.makedirs(folder)
    for number, (name, text, words) in enumerate(BAD_SETTINGS):
        path = os.path.join(folder, f"bad{number}.yaml")
        with open(path, "w", encoding="utf-8") as file:
            file.write(text)
        for command in (["serve"], ["inspect"], ["inspect", "--json"], ["target", "--book", "harbour"]):
            done = run(program, *command, "--settings", path, limit_s=30)
            what = f"settings: {name}, {' '.join(command)}"
            checks.equal(done.returncode, 2, f"{what}: exit code")
            checks.that(f"bad{number}.yaml{words}" in done.stderr, f"{what}: words", done.stderr)
            checks.equal(done.stdout, "", f"{what}: nothing on standard output")
        checks.that(not os.path.exists(os.path.join(folder, "var")), f"settings: {name}: nothing was made")
    done = run(program, "serve", "--settings", os.path.join(folder, "none.yaml"), limit_s=30)
    checks.that(done.returncode == 2 and "none.yaml" in done.stderr, "settings: no such file", done.stderr)
    checks.that(service.is_running(), "the live service goes on")


def serve_fails(checks, program, settings, what, words, code=1, limit_s=60):
    done = run(program, "serve", "--settings", settings, limit_s=limit_s)
    text = done.stderr + done.stdout
    checks.equal(done.returncode, code, f"{what}: exit code")
    for word in words:
        checks.that(word in done.stderr, f"{what}: says \"{word}\"", text)
    checks.that("terminate called" not in text and "fault of the program" not in text, f"{what}: no fault", text)


def databases(checks, program, folder):
    """On copies of a closed database with nights in it."""
    source = os.path.join(folder, "source")
    os.makedirs(source)
    settings = os.path.join(source, "nightweigh.yaml")
    with open(settings, "w", encoding="utf-8") as file:
        file.write(SETTINGS)
    data = os.path.join(source, "var")
    with Service(program, settings, data).start() as service:
        bench = Bench(checks, service)
        for _ in range(10):
            bench.feed_good("a database to spoil")
        bench.feeder.close()
        head = service.head("harbour")
        service.end()

    def spoiled(name):
        target = os.path.join(folder, name)
        shutil.copytree(source, target)
        return os.path.join(target, "nightweigh.yaml"), os.path.join(target, "var", "nightweigh.db")

    def bytes_of(path):
        with open(path, "rb") as file:
            return file.read()

    path, database = spoiled("future")
    with sqlite3.connect(database) as connection:
        connection.execute("PRAGMA user_version = 99")
    connection.close()
    before = bytes_of(database)
    serve_fails(checks, program, path, "a database from the future",
                ["nightweigh.db", "the database has schema version 99", "it was not touched",
                 "Use the nightweigh release that wrote the database"])
    checks.that(bytes_of(database) == before, "a database from the future: not touched")
    done = run(program, "inspect", "--settings", path)
    checks.that(done.returncode == 1 and "schema version 99" in done.stderr + done.stdout,
                "a database from the future: inspect", done.stderr + done.stdout)

    path, database = spoiled("locked")
    holder = sqlite3.connect(database, isolation_level=None)
    holder.execute("BEGIN EXCLUSIVE")
    serve_fails(checks, program, path, "a locked database",
                ["nightweigh.db", "the database is held by another process or connection",
                 "Stop the other program that has the file open, then try again"])
    holder.execute("ROLLBACK")
    holder.close()
    with Service(program, path, os.path.dirname(database)).start() as service:
        checks.equal(service.head("harbour"), head, "a locked database: good again when it is free")
        service.end()

    size = os.path.getsize(os.path.join(data, "nightweigh.db"))
    for name, kept in (("empty", 0), ("100 bytes", 100), ("half", size // 2 // 4096 * 4096), ("a cut page", size - 1000),
                       ("a page short", size - 4096)):
        path, database = spoiled("cut " + name)
        with open(database, "r+b") as file:
            file.truncate(kept)
        before = bytes_of(database)
        serve_fails(checks, program, path, f"a truncated database ({name})", ["nightweigh.db", "backup"])
        checks.that(bytes_of(database) == before, f"a truncated database ({name}): not touched")
    path, database = spoiled("foreign")
    with open(database, "wb") as file:
        file.write(b"no database at all\n" * 1000)
    serve_fails(checks, program, path, "a file that is no database", ["nightweigh.db", "the file is no database"])
    path, database = spoiled("missing beside its log")
    os.rename(database, database + "-wal")
    serve_fails(checks, program, path, "a database missing beside its log",
                ["the database is missing but its log is there"])
    path, database = spoiled("other start")
    with open(path, "r+", encoding="utf-8") as file:
        text = file.read().replace('"1000000.00"', '"2000000.00"')
        file.seek(0)
        file.write(text)
    serve_fails(checks, program, path, "another start after the first night",
                ["book harbour, key start: cannot change after the book's first night"], code=2)


def places_in_use(checks, program, folder, service):
    # A second service on the same folder.
    serve_fails(checks, program, service.settings, "a second service",
                [f"process {service.process.pid} is working in this folder",
                 "Stop it first, or use another data_dir"])
    checks.equal(service.read_endpoints(), service.endpoints, "a second service: endpoints.json is left alone")
    checks.equal(service.get("/readyz").status, 200, "a second service: the first goes on")

    def other(name, old, new):
        target = os.path.join(folder, name)
        os.makedirs(target)
        path = os.path.join(target, "nightweigh.yaml")
        with open(path, "w", encoding="utf-8") as file:
            file.write(changed(old, new))
        return path, os.path.join(target, "var")

    path, _ = other("same http", 'http: "127.0.0.1:0"', f'http: "{service.endpoints["http"]}"')
    serve_fails(checks, program, path, "an HTTP port in use", [service.endpoints["http"], "the address is in use"])
    path, _ = other("same feed", 'feed_socket: "127.0.0.1:0"', f'feed_socket: "{service.endpoints["feed"]}"')
    serve_fails(checks, program, path, "a feed port in use", [service.endpoints["feed"], "the address is in use"])

    # Socket paths: short ones, as the system allows 107 bytes.
    with tempfile.TemporaryDirectory(prefix="nw-") as short:
        feed, http_path = os.path.join(short, "feed.sock"), os.path.join(short, "http.sock")
        stale = socket.socket(socket.AF_UNIX)
        stale.bind(feed)
        stale.close()  # the file stays, nobody listens: it is replaced
        path, data = other("unix", 'feed_socket: "127.0.0.1:0"', f'feed_socket: "unix:{feed}"')
        with Service(program, path, data).start() as first:
            checks.equal(first.endpoints["feed"], f"unix:{feed}", "a stale socket file is replaced")
            bench = Bench(checks, first)
            bench.feed_good("a Unix-domain socket")
            second, _ = other("unix again", 'feed_socket: "127.0.0.1:0"', f'feed_socket: "unix:{feed}"')
            serve_fails(checks, program, second, "a socket path in use", [feed, "somebody listens there already"])
            bench.feed_good("a socket path in use")
            bench.feeder.close()
            first.end()
        checks.that(not os.path.exists(feed), "the socket file is removed at the end")
        with open(feed, "w", encoding="utf-8") as file:
            file.write("precious")
        second, _ = other("unix on a file", 'feed_socket: "127.0.0.1:0"', f'feed_socket: "unix:{feed}"')
        serve_fails(checks, program, second, "a socket path that is a file", [feed], code=2)
        with open(feed, encoding="utf-8") as file:
            checks.equal(file.read(), "precious", "a socket path that is a file: the file is kept")
        with socket.socket(socket.AF_UNIX) as listener:
            listener.bind(http_path)
            listener.listen()
            second, _ = other("unix http", 'http: "127.0.0.1:0"', f'http: "unix:{http_path}"')
            serve_fails(checks, program, second, "an HTTP socket path in use", [http_path, "another process listens"])


def main():
    checks = Checks()
    program = os.path.abspath(sys.argv[1])
    began = time.monotonic()
    with tempfile.TemporaryDirectory(prefix="nightweigh-bad-") as folder:
        main_folder = os.path.join(folder, "main")
        os.makedirs(main_folder)
        settings = os.path.join(main_folder, "nightweigh.yaml")
        with open(settings, "w", encoding="utf-8") as file:
            file.write(SETTINGS)
        with Service(program, settings, os.path.join(main_folder, "var")).start() as service:
            bench = Bench(checks, service)
            bench.feed_good("before everything")
            for part in (table_of_closes, more_bad_batches, unnamed_and_ignored_files, repeated_and_misordered,
                         cut_and_hostile, locked_while_running):
                part(bench)
                print(f"{part.__name__}: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
            settings_that_are_bad(checks, program, folder, service)
            print(f"settings_that_are_bad: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
            places_in_use(checks, program, folder, service)
            print(f"places_in_use: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
            code, seconds = service.end()
            checks.equal(code, 0, "the service ends well after all this")
        databases(checks, program, folder)
        print(f"databases: {checks.done} checks, {time.monotonic() - began:.1f} s", flush=True)
    return checks.finish()


if __name__ == "__main__":
    sys.exit(main())
