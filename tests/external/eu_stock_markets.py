#!/usr/bin/python3
"""A live service on real closes, against independent accounts of the same days.

usage: eu_stock_markets.py PATH_TO_NIGHTWEIGH

The closes are `EuStockMarkets` of base R: the daily closes of four stock indices, 1860 business days from
1991 to 1998. They are read from the installed R (Debian's r-base-core) while the test runs and are never
kept. R has only fractions of years for their dates and leaves holidays out, so the days are given dates here:
the weekdays from 1991-07-01 on, one after the other. The four get invented names.

They are fed through the feed socket, one line of JSON a day, into a service with two books:
  drift   exponentiated gradient, eta 0.05, fractional lots
  fixed   constant mix of unequal weights, whole lots
both with execution_lag_nights 1 and the default costs. Every night is then read back over HTTP and compared:
  relatives            close / previous close
  wanted weights       to 1e-12: numpy, from the formula as Helmbold, Schapire, Singer and Warmuth published it
                       ("On-line portfolio selection using multiplicative updates", Mathematical Finance 8 (1998)
                       325-347): w_i exp(eta x_i / w.x) / Z, multiplied up day by day (the C++ adds logarithms)
  ledger               to the last digit: Python's `decimal` fills the recorded sheets again by the documented
                       rules (daemon/ledger/account.h, daemon/night/fills.h) and keeps its own cash, positions
                       and net asset value
  held weights         to 1e-12, from that account
  wealth_frictionless  to 1e-12: the product of wanted(t-1).relatives(t)
  bound                ln S* - ln S <= ln(m)/eta + eta n / (8 r^2) on every night, r the smallest relative when
                       each day's largest is scaled to 1 (theorem of that paper, constant re-derived). The best
                       constant mix in hindsight is found by Cover's iteration ("An algorithm for maximizing
                       expected log investment return", IEEE Transactions on Information Theory 30 (1984)
                       369-373, from memory), and what the iteration has not reached is bounded by Jensen:
                       ln S* <= ln S(b) + n ln max_i mean(x_i / b.x)

A second service gets the worked example of a 2:1 split and dividends, see corporate_actions().

Each check is then shown sources that are wrong on purpose (another eta, a close off by a cent, a fee off by a
cent, ...), and must notice every one of them. Needs Debian's python3-numpy and r-base-core. Exit 0: all agree.
"""
import copy
import csv
import io
import math
import os
import shutil
import subprocess
import sys
import tempfile
from decimal import ROUND_DOWN, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal, getcontext

import numpy as np

sys.dont_write_bytecode = True  # the source folder stays as it is
sys.path.insert(0, os.path.join(os.path.dirname(os.path.abspath(__file__)), "..", "end_to_end"))
from live import Checks, Service, closes_line, weekdays  # noqa: E402

getcontext().prec = 60  # exact for every product that occurs here

INSTRUMENTS = ["ALDER", "BRINE", "COPPER", "DUNE"]
ETA = 0.05
MIX = {"ALDER": 0.4, "BRINE": 0.3, "COPPER": 0.2, "DUNE": 0.1}
CENT = Decimal("0.01")
# Defaults of the settings: 2 bp commission, 3 bp half spread.
COMMISSION = Decimal("0.0002")
HALF_SPREAD = Decimal("0.0003")
FRACTION = Decimal("0.00000001")  # the smallest quantity where lot_size is 0
TOLERANCE = 1e-12


# ---- the closes

def closes_from_r():
    """1860 rows of four decimal texts, as R prints them with 15 digits: those of its source."""
    if shutil.which("Rscript") is None:
        raise SystemExit("Rscript is missing: install Debian's r-base-core (--no-install-recommends will do)")
    text = subprocess.run(
        ["Rscript", "--vanilla", "-e",
         "options(digits = 15); write.csv(as.data.frame(EuStockMarkets), stdout(), row.names = FALSE)"],
        capture_output=True, text=True, check=True, timeout=120,
    ).stdout
    rows = list(csv.reader(io.StringIO(text)))[1:]
    if len(rows) != 1860 or any(len(row) != 4 for row in rows):
        raise RuntimeError(f"EuStockMarkets has another form than expected: {len(rows)} rows")
    return rows


def settings_text(lot_sizes, books):
    instruments = "".join(f"  - {{id: {name}, currency: EUR, lot_size: {lot}}}\n" for name, lot in lot_sizes.items())
    return (
        "service:\n  data_dir: ./var\n  http: \"127.0.0.1:0\"\n  feed_socket: \"127.0.0.1:0\"\n  log_level: warn\n"
        f"instruments:\n{instruments}books:\n{books}"
    )


def book_text(name, instruments, start, strategy, cash="1000000.00", holdings="{}"):
    return (
        f"  - name: {name}\n    currency: EUR\n    instruments: [{', '.join(instruments)}]\n"
        f"    start: {{date: {start}, cash: {{EUR: \"{cash}\"}}, holdings: {holdings}}}\n"
        f"    strategy: {strategy}\n    execution: assumed\n    execution_lag_nights: 1\n"
    )


# ---- the account, in Python's decimal

def half_even(value):
    return value.quantize(CENT, rounding=ROUND_HALF_EVEN)


class Account:
    """Cash and positions of one book, kept by the documented rules."""

    def __init__(self, cash, lots, fee_error=Decimal(0)):
        self.cash = cash
        self.lots = {name: lot if lot else FRACTION for name, lot in lots.items()}
        self.fractional = {name: not lot for name, lot in lots.items()}
        self.positions = {name: Decimal(0) for name in lots}
        self.fee_error = fee_error  # spoils the first fee, to see whether that is noticed
        self.rows = []
        self.shrunk = 0

    def value(self, closes):
        return self.cash + sum((self.positions[name] * closes[name] for name in self.positions), Decimal(0))

    def book(self, cause, name, quantity, cash):
        self.cash += cash
        if name:
            self.positions[name] += quantity
        self.rows.append((cause, name, quantity, cash))

    # price = close * (1 +- half spread); what it brings is rounded against the book, its commission half to even.
    @staticmethod
    def cash_of(quantity, close):
        price = close * (1 + (HALF_SPREAD if quantity > 0 else -HALF_SPREAD))
        return (-quantity * price).quantize(CENT, rounding=ROUND_FLOOR), half_even(abs(quantity) * close * COMMISSION)

    def trade(self, name, quantity, close):
        proceeds, commission = self.cash_of(quantity, close)
        commission += self.fee_error
        self.fee_error = Decimal(0)
        self.book("fill", name, quantity, proceeds)
        if commission:
            self.book("fee", name, Decimal(0), -commission)

    def act(self, row, close, pending):
        """A dividend on the shares held before the split, then the split; a pending order splits too."""
        name = row["instrument"]
        dividend = half_even(self.positions[name] * Decimal(row.get("dividend", "0")))
        if dividend:
            self.book("dividend", name, Decimal(0), dividend)
        if "split" not in row:
            return
        ratio = Decimal(row["split"])
        held = self.positions[name]
        if held:
            exact = held * ratio
            whole = self.down(name, exact, FRACTION if self.fractional[name] else Decimal(1))
            self.book("split", name, whole - held, Decimal(0))
            in_lieu = half_even((exact - whole) * close)
            if in_lieu:
                self.book("cash_in_lieu", name, Decimal(0), in_lieu)
        for order in pending:
            if order["instrument"] != name:
                continue
            quantity = Decimal(order["quantity"])
            sells_all = order["side"] == "sell" and quantity == held
            order["quantity"] = self.positions[name] if sells_all else self.down(name, quantity * ratio)

    def down(self, name, quantity, unit=None):
        unit = unit or self.lots[name]
        return (quantity / unit).to_integral_value(rounding=ROUND_DOWN) * unit

    def outlay(self, name, quantity, closes):
        proceeds, commission = self.cash_of(quantity, closes[name])
        return commission - proceeds

    def fill(self, orders, closes):
        """Sales first; buys shrink in proportion, in whole lots, where they would cost more than the cash."""
        for order in orders:
            if order["side"] == "sell":
                name = order["instrument"]
                quantity = min(Decimal(order["quantity"]), self.positions[name])
                if quantity:
                    self.trade(name, -quantity, closes[name])
        buys = [[o["instrument"], Decimal(o["quantity"])] for o in orders if o["side"] == "buy"]
        needed = sum((self.outlay(name, quantity, closes) for name, quantity in buys), Decimal(0))
        if needed > self.cash:
            self.shrunk += 1
            for buy in buys:
                fraction = (buy[1] * self.cash / needed).quantize(FRACTION, rounding=ROUND_DOWN)
                buy[1] = self.down(buy[0], fraction)
            while True:
                costs = [self.outlay(name, quantity, closes) for name, quantity in buys]
                short_by = sum(costs, Decimal(0)) - self.cash
                if short_by <= 0:
                    break
                # Cents of rounding: the dearest buy gives them back.
                dearest = buys[costs.index(max(costs))]
                name, lot = dearest[0], self.lots[dearest[0]]
                if self.fractional[name]:
                    less = lot + (short_by / closes[name]).quantize(FRACTION, rounding=ROUND_DOWN)
                else:
                    share = short_by / (lot * closes[name] * len(buys))
                    less = lot * max(Decimal(1), share.to_integral_value(rounding=ROUND_DOWN))
                dearest[1] = max(Decimal(0), dearest[1] - less)
        for name, quantity in buys:
            if quantity:
                self.trade(name, quantity, closes[name])


# ---- the checks: each returns what is wrong, at most one entry a night and figure

def check_relatives(nights, days):
    wrong = []
    for t, night in enumerate(nights):
        for row, before in zip(days[t], days[t - 1] if t else days[t]):
            expected = 1.0
            if t:
                expected = float(
                    (Decimal(row.get("split", "1")) * Decimal(row["close"]) + Decimal(row.get("dividend", "0")))
                    / Decimal(before["close"])
                )
            found = night["relatives"][row["instrument"]]
            if not abs(found - expected) <= 4e-16 * expected:
                wrong.append(f"{night['date']} {row['instrument']}: relative {found!r}, expected {expected!r}")
        if night["relatives"]["CASH"] != 1.0:
            wrong.append(f"{night['date']}: relative of cash {night['relatives']['CASH']!r}")
    return wrong


def relatives_of(days, instruments):
    closes = np.array([[float(row["close"]) for row in day] for day in days])
    assert closes.shape[1] == len(instruments)
    return closes[1:] / closes[:-1]


def gradient_weights(x, eta):
    """One row a night: before the first relative, then after each."""
    w = np.full(x.shape[1], 1.0 / x.shape[1])
    out = [w]
    for day in x:
        w = w * np.exp(eta * day / (w @ day))
        w = w / w.sum()
        out.append(w)
    return np.array(out)


def check_wanted(nights, weights, instruments):
    wrong = []
    for night, expected in zip(nights, weights):
        found = np.array([night["wanted"][name] for name in instruments])
        worst = np.abs(found - expected).max()
        if not worst <= TOLERANCE or night["wanted"]["CASH"] != 0.0:
            wrong.append(f"{night['date']}: wanted is off by {worst:.3g}")
    return wrong


def check_frictionless(nights, weights, x):
    growth = np.concatenate([[0.0], np.cumsum([math.log(w @ day) for w, day in zip(weights[:-1], x)])])
    wrong = []
    for night, expected in zip(nights, growth):
        off = abs(night["wealth_frictionless"] / math.exp(expected) - 1)
        if not off <= TOLERANCE:
            wrong.append(f"{night['date']}: wealth_frictionless is off by {off:.3g}")
    return wrong


def check_ledger(nights, days, account):
    """Fills the recorded sheets again; the closes come from the feed, not from the record."""
    wrong, pending = [], []
    opening = None
    for t, (night, day) in enumerate(zip(nights, days)):
        closes = {row["instrument"]: Decimal(row["close"]) for row in day}
        before = len(wrong)

        def compare(what, found, expected, night=night):
            if Decimal(found) != expected:
                wrong.append(f"{night['date']}: {what} {found}, expected {expected}")

        def compare_weights(what, value, night=night):
            lines = {name: account.positions[name] * closes[name] / value for name in closes}
            lines["CASH"] = account.cash / value
            worst = max(abs(night[what][name] - float(share)) for name, share in lines.items())
            if set(lines) != set(night[what]) or not worst <= TOLERANCE:
                wrong.append(f"{night['date']}: {what} is off by {worst:.3g}")

        account.rows = []
        if t > 0:
            for row in day:
                account.act(row, closes[row["instrument"]], pending)
        else:
            opening = account.value(closes)
        value_before = account.value(closes)
        compare("net asset value before fills", night["account"]["net_asset_value_before_fills"], value_before)
        compare_weights("held_before", value_before)
        account.fill(pending, closes)
        value = account.value(closes)
        compare("net asset value", night["account"]["net_asset_value"], value)
        compare("cash", night["account"]["cash"]["EUR"], account.cash)
        for name, quantity in account.positions.items():
            compare(f"position of {name}", night["account"]["positions"][name], quantity)
        compare_weights("held_after", value)
        if t > 0:  # the first night has rows of the opening
            recorded = [
                (r["cause"], r.get("instrument"), Decimal(r.get("quantity", "0")), Decimal(r["cash"]))
                for r in night["ledger"]
            ]
            if recorded != account.rows:
                wrong.append(f"{night['date']}: ledger rows {recorded}, expected {account.rows}")
        if not abs(night["wealth_net"] / float(value / opening) - 1) <= TOLERANCE:
            wrong.append(f"{night['date']}: wealth_net {night['wealth_net']}, expected {value / opening}")
        if not abs(night["cost_paid"] - float((value_before / value).ln())) <= TOLERANCE:
            wrong.append(f"{night['date']}: cost_paid {night['cost_paid']}, expected {(value_before / value).ln()}")
        # The account is exact: from the first difference on, everything differs.
        if len(wrong) > before:
            return wrong
        pending = [dict(order) for order in night["sheet"]["orders"]] if night["sheet"] else []
    return wrong


def best_constant_mix(x, steps=200_000, gap=1e-11):
    """Cover's iteration b_i <- b_i mean(x_i / b.x). Returns b, ln S*(from below), and what may be missing."""
    n, m = x.shape
    b = np.full(m, 1.0 / m)
    for step in range(steps):
        g = (x / (x @ b)[:, None]).mean(axis=0)
        # Steps of a power are taken early on, where the plain iteration creeps; growth must not fall.
        missing = n * math.log(g.max())
        if missing <= n * gap:
            break
        tried = b * g ** (64 if step % 2 == 0 else 1)
        tried /= tried.sum()
        if np.log(x @ tried).sum() < np.log(x @ b).sum():
            tried = b * g
            tried /= tried.sum()
        b = tried
    return b, float(np.log(x @ b).sum()), missing


def check_bound(nights, x, eta):
    """On every night by the anchor's certificate, on eight dates by a fresh optimum."""
    n, m = x.shape
    wealth = np.log([night["wealth_frictionless"] for night in nights])
    scaled = x / x.max(axis=1)[:, None]
    smallest = np.minimum.accumulate(scaled.min(axis=1))
    count = np.arange(1, n + 1)
    bound = math.log(m) / eta + eta * count / (8 * smallest**2)
    anchor, _, _ = best_constant_mix(x)
    ratio = x / (x @ anchor)[:, None]
    most = np.cumsum(np.log(x @ anchor)) + count * np.log(np.cumsum(ratio, axis=0).max(axis=1) / count)
    wrong = [
        f"{nights[t]['date']}: regret up to {most[t - 1] - wealth[t]:.4f} passes the bound {bound[t - 1]:.4f}"
        for t in range(1, n + 1)
        if not most[t - 1] - wealth[t] <= bound[t - 1]
    ]
    realised = []
    for t in sorted({max(1, n * k // 8) for k in range(1, 9)}):
        _, growth, missing = best_constant_mix(x[:t])
        regret = growth + missing - wealth[t]
        realised.append((nights[t]["date"], regret, bound[t - 1]))
        if not missing <= 1e-6:
            wrong.append(f"{nights[t]['date']}: the best constant mix was not found, {missing:.3g} may be missing")
        if not growth <= most[t - 1] + 1e-9:
            wrong.append(f"{nights[t]['date']}: the certificate is below a constant mix that exists")
        if not regret <= bound[t - 1]:
            wrong.append(f"{nights[t]['date']}: regret {regret:.4f} passes the bound {bound[t - 1]:.4f}")
    return wrong, realised


# ---- running

def live_nights(program, folder, settings, days, books):
    """Feeds the days one by one over the socket; reads every night back."""
    os.makedirs(folder)
    path = os.path.join(folder, "nightweigh.yaml")
    with open(path, "w", encoding="utf-8") as file:
        file.write(settings)
    out = {}
    with Service(program, path, os.path.join(folder, "var")).start() as service:
        with service.feeder() as feeder:
            for number, day in enumerate(days):
                answer = feeder.send(closes_line(day))
                nights = {book["book"]: book["dates"] for book in answer["books"]}
                if answer["status"] != "taken" or nights != {book: [day[0]["date"]] for book in books}:
                    raise RuntimeError(f"{day[0]['date']}: {answer}")
                if (number + 1) % 500 == 0:
                    print(f"  {number + 1} days fed", flush=True)
        for book in books:
            out[book] = [service.night(book, day[0]["date"]) for day in days]
        code, _ = service.end()
        if code != 0:
            raise RuntimeError(f"the service ended with {code}")
    return out


def real_closes(checks, program, folder):
    rows = closes_from_r()
    dates = weekdays("1991-07-01", len(rows))
    days = [
        [{"date": day, "instrument": name, "close": text} for name, text in zip(INSTRUMENTS, row)]
        for day, row in zip(dates, rows)
    ]
    # One instrument has one lot size, so the books hold two sets of names for the same closes.
    whole = {name: name + "-W" for name in INSTRUMENTS}
    fed = [day + [dict(row, instrument=whole[row["instrument"]]) for row in day] for day in days]
    mix = ", ".join(f"{whole[name]}: {share}" for name, share in MIX.items())
    settings = settings_text(
        {**dict.fromkeys(INSTRUMENTS, 0), **dict.fromkeys(whole.values(), 1)},
        book_text("drift", INSTRUMENTS, dates[0], f"{{rule: exponentiated_gradient, eta: {ETA}}}")
        + book_text("fixed", whole.values(), dates[0], f"{{rule: constant_mix, weights: {{{mix}}}}}"),
    )
    print(f"EuStockMarkets: {len(rows)} days into two books", flush=True)
    nights = live_nights(program, os.path.join(folder, "real"), settings, fed, ["drift", "fixed"])
    wholes = list(whole.values())
    whole_days = [day[len(INSTRUMENTS):] for day in fed]
    x = relatives_of(days, INSTRUMENTS)
    million = Decimal("1000000.00")
    gradient = gradient_weights(x, ETA)
    constant = np.tile(list(MIX.values()), (len(days), 1))

    def account(lots, **spoiled):
        return Account(million, lots, **spoiled)

    fractional = dict.fromkeys(INSTRUMENTS, Decimal(0))
    in_lots = dict.fromkeys(wholes, Decimal(1))

    def holds(wrong, what):
        checks.that(not wrong, what, "; ".join(wrong[:3]))

    holds(check_relatives(nights["drift"], days), "relatives of drift")
    holds(check_relatives(nights["fixed"], whole_days), "relatives of fixed")
    holds(check_wanted(nights["drift"], gradient, INSTRUMENTS), "wanted of drift: exponentiated gradient in numpy")
    holds(check_wanted(nights["fixed"], constant, wholes), "wanted of fixed: the mix of the settings")
    books = {"drift": account(fractional), "fixed": account(in_lots)}
    holds(check_ledger(nights["drift"], days, books["drift"]), "ledger of drift in decimal, fractional lots")
    holds(check_ledger(nights["fixed"], whole_days, books["fixed"]), "ledger of fixed in decimal, whole lots")
    holds(check_frictionless(nights["drift"], gradient, x), "wealth_frictionless of drift")
    holds(check_frictionless(nights["fixed"], constant, x), "wealth_frictionless of fixed")
    wrong, realised = check_bound(nights["drift"], x, ETA)
    holds(wrong, "bound of exponentiated gradient")
    for name in books:
        moves = sum(night["verdict"] == "move" for night in nights[name])
        checks.that(moves > 1, f"{name} moved more than once", moves)
        print(f"  {name}: {len(nights[name])} nights, {moves} sheets, {books[name].shrunk} with shrunk buys, "
              f"net {nights[name][-1]['wealth_net']:.6f}, frictionless {nights[name][-1]['wealth_frictionless']:.6f}")
    checks.that(any(book.shrunk for book in books.values()), "a buy was shrunk somewhere")
    for day, regret, bound in realised:
        print(f"  {day}: regret against the best constant mix {regret:.6f} nats, bound {bound:.3f}")

    # Wrong on purpose: every one must be noticed.
    def notices(wrong, what):
        checks.that(bool(wrong), f"notices {what}")

    def a_cent_off(source, day, line):
        spoiled = copy.deepcopy(source)
        spoiled[day][line]["close"] = str(Decimal(spoiled[day][line]["close"]) + CENT)
        return spoiled

    cent_days = a_cent_off(days, 1000, 2)
    cent_x = relatives_of(cent_days, INSTRUMENTS)
    notices(check_relatives(nights["drift"], cent_days), "a close off by a cent (relatives)")
    notices(check_wanted(nights["drift"], gradient_weights(x, 0.0500001), INSTRUMENTS), "eta 0.0500001")
    notices(check_wanted(nights["drift"], gradient_weights(cent_x, ETA), INSTRUMENTS), "a close off by a cent (wanted)")
    slipped = constant + np.array([1e-11, -1e-11, 0, 0])
    notices(check_wanted(nights["fixed"], slipped, wholes), "a mix off by 1e-11")
    notices(check_frictionless(nights["drift"], gradient_weights(x, 0.0500001), x), "eta 0.0500001 (wealth)")
    notices(check_frictionless(nights["fixed"], constant, cent_x), "a close off by a cent (wealth)")
    for name, lots, source in (("drift", fractional, days), ("fixed", in_lots, whole_days)):
        notices(check_ledger(nights[name], source, account(lots, fee_error=CENT)), f"a fee off by a cent in {name}")
        notices(check_ledger(nights[name], a_cent_off(source, 1000, 2), account(lots)),
                f"a close off by a cent in {name}'s ledger")
        spoiled = copy.deepcopy(nights[name])
        sheet = next(night["sheet"] for night in spoiled[10:] if night["sheet"])
        order = sheet["orders"][0]
        order["quantity"] = str(Decimal(order["quantity"]) - (lots[order["instrument"]] or FRACTION))
        notices(check_ledger(spoiled, source, account(lots)), f"an order of {name} off by a lot")
    poorer = copy.deepcopy(nights["drift"])
    for night in poorer:
        night["wealth_frictionless"] *= math.exp(-realised[-1][2])
    notices(check_bound(poorer, x, ETA)[0], "a wealth below the bound")


def corporate_actions(checks, program, folder):
    """ALDER: closes 46.99, 48.30, then a 2:1 split and 24.96, then a dividend of 0.08 and 24.53: the worked example
    of a published table of adjusted closes "adhering to CRSP standards" (23.42, 24.07, 24.88). Taken directly,
    R = (split * close + dividend) / previous close: 2 * 24.96 / 48.30 = 1.0335403727 on the split's day and
    (24.53 + 0.08) / 24.96 = 0.9859775641 on the ex-date (the ratio of adjusted closes would be 0.9859324759).
    COPPER: a special dividend of 5 on a close of 50, then 46: R = 1.02 (from memory, and plain arithmetic).
    """
    dates = weekdays("2024-01-08", 4)
    table = {
        "ALDER": [{"close": "46.99"}, {"close": "48.30"}, {"close": "24.96", "split": "2"},
                  {"close": "24.53", "dividend": "0.08"}],
        "COPPER": [{"close": "50"}, {"close": "50"}, {"close": "46", "dividend": "5"}, {"close": "46.20"}],
    }
    days = [[dict(table[name][t], date=dates[t], instrument=name) for name in table] for t in range(4)]
    settings = settings_text(
        dict.fromkeys(table, 1),
        book_text("acts", table, dates[0], "{rule: constant_mix}", "100.00", "{ALDER: 501, COPPER: 470}"),
    )
    nights = live_nights(program, os.path.join(folder, "acts"), settings, days, ["acts"])["acts"]
    found = [night["relatives"] for night in nights]

    def account(**spoiled):
        out = Account(Decimal("100.00"), dict.fromkeys(table, Decimal(1)), **spoiled)
        out.positions.update(ALDER=Decimal(501), COPPER=Decimal(470))
        return out

    def printed(value):
        return f"{value:.10f}"

    checks.equal(printed(found[2]["ALDER"]), "1.0335403727", "relative of the day of the split")
    checks.equal(printed(found[3]["ALDER"]), "0.9859775641", "relative of the ex-date")
    checks.equal(printed(found[2]["COPPER"]), "1.0200000000", "relative of the special dividend")
    checks.that(not check_relatives(nights, days), "relatives of all days")
    wrong = check_ledger(nights, days, account())
    checks.that(not wrong, "ledger with split and dividends in decimal", "; ".join(wrong[:3]))

    def rows(night, cause, name):
        return [row for row in night["ledger"] if row["cause"] == cause and row["instrument"] == name]

    held = Decimal(nights[1]["account"]["positions"]["ALDER"])
    split = rows(nights[2], "split", "ALDER")
    checks.equal([Decimal(row["quantity"]) for row in split], [held], "the split doubles the holding")
    checks.equal(rows(nights[2], "cash_in_lieu", "ALDER"), [], "no fraction is left")
    for t, name in ((2, "COPPER"), (3, "ALDER")):
        shares = Decimal(nights[t - 1]["account"]["positions"][name])
        cash = [Decimal(row["cash"]) for row in rows(nights[t], "dividend", name)]
        expected = half_even(shares * Decimal(table[name][t]["dividend"]))
        checks.equal(cash, [expected], f"dividend cash of {name}")
    # The value moves by what the relatives say: nothing is lost between close and ledger.
    for t in (2, 3):
        before = nights[t - 1]
        growth = sum(before["held_after"][line] * nights[t]["relatives"][line] for line in before["held_after"])
        value = float(nights[t]["account"]["net_asset_value_before_fills"])
        off = abs(value / float(before["account"]["net_asset_value"]) / growth - 1)
        checks.that(off <= 1e-7, f"value and relatives agree on {dates[t]}", off)  # dividend cash is in whole cents

    without = copy.deepcopy(days)
    del without[2][0]["split"]
    checks.that(bool(check_relatives(nights, without)), "notices a missing split (relatives)")
    checks.that(bool(check_ledger(nights, without, account())), "notices a missing split (ledger)")
    cent = copy.deepcopy(days)
    cent[3][0]["dividend"] = "0.09"
    checks.that(bool(check_relatives(nights, cent)), "notices a dividend off by a cent (relatives)")
    checks.that(bool(check_ledger(nights, cent, account())), "notices a dividend off by a cent (ledger)")
    print(f"corporate actions: relatives {found[2]['ALDER']:.10f} {found[3]['ALDER']:.10f} {found[2]['COPPER']:.10f}")


def main():
    checks = Checks()
    program = os.path.abspath(sys.argv[1])
    with tempfile.TemporaryDirectory(prefix="nightweigh-external-") as folder:
        corporate_actions(checks, program, folder)
        real_closes(checks, program, folder)
    return checks.finish()


if __name__ == "__main__":
    sys.exit(main())
