#include "daemon/commands/scenario_market.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>
#include <random>

namespace nightweigh::commands {

namespace {

struct Character {
  const char* id;
  double first_price;
  double yearly_drift;     // of the log, dividend included
  double beta;             // on the common factor
  double daily_sd;         // of its own noise
  double yearly_dividend;  // as a share of the price
  int payments_a_year;     // 0, 2 or 4
  int first_month;         // of a payment, 1 to 12
  int split;               // new shares for one, about half-way; 0 = none
};

constexpr std::array<Character, 8> characters = {{
    {"ALDER", 61.20, 0.07, 1.00, 0.0080, 0.024, 4, 3, 0},
    {"BRINE", 34.50, 0.04, 0.70, 0.0070, 0.038, 2, 5, 0},
    {"COPPER", 118.00, 0.05, 1.30, 0.0110, 0.018, 2, 4, 0},
    {"DUNE", 22.40, 0.06, 0.90, 0.0090, 0.030, 4, 2, 0},
    {"EMBER", 240.00, 0.12, 1.20, 0.0120, 0.000, 0, 0, 3},
    {"FJORD", 87.30, 0.05, 0.60, 0.0065, 0.042, 2, 6, 0},
    {"GROVE", 15.75, 0.03, 0.80, 0.0100, 0.012, 4, 1, 0},
    {"HARROW", 52.10, 0.08, 1.10, 0.0105, 0.000, 0, 0, 0},
}};

constexpr double factor_daily_sd = 0.0070;
constexpr double shock_max = 5.0;  // standard deviations
constexpr int trading_days_a_year = 252;
constexpr int payment_day_of_month = 10;  // ex on the first weekday from here on

// The distributions of <random> may differ from one library to the next; the engine may not.
class Randomness {
 public:
  explicit Randomness(std::uint64_t seed) : engine_(seed) {}

  // Strictly between 0 and 1: the upper 53 bits, in the middle of their cell.
  double uniform() { return (static_cast<double>(engine_() >> 11) + 0.5) * 0x1.0p-53; }

  // Box and Muller 1958, the cosine half.
  double normal() {
    const double radius = std::sqrt(-2.0 * std::log(uniform()));
    return radius * std::cos(2.0 * std::numbers::pi * uniform());
  }

  // Student t of 5 degrees of freedom, scaled to variance 1 (its own is 5/3), drawn again beyond
  // shock_max: tails stay fat, but no close is so odd that a careful reader would take it for a mistake.
  double fat_tailed() {
    for (;;) {
      const double numerator = normal();
      double chi_squared = 0.0;
      for (int i = 0; i < 5; ++i) {
        const double z = normal();
        chi_squared += z * z;
      }
      const double shock = numerator / std::sqrt(chi_squared / 5.0) * std::sqrt(3.0 / 5.0);
      if (std::abs(shock) <= shock_max) return shock;
    }
  }

 private:
  std::mt19937_64 engine_;
};

// A shock whose log variance is a mean-reverting autoregression, started in its stationary law.
class ChangingShock {
 public:
  ChangingShock(double persistence, double step, Randomness& randomness)
      : persistence_(persistence),
        step_(step),
        stationary_variance_(step * step / (1.0 - persistence * persistence)),
        log_variance_(std::sqrt(stationary_variance_) * randomness.normal()) {}

  double next(Randomness& randomness) {
    log_variance_ = persistence_ * log_variance_ + step_ * randomness.normal();
    // exp(h) has the mean exp(var/2); taking a quarter off the exponent's half makes the variance's mean 1.
    return std::exp(0.5 * log_variance_ - 0.25 * stationary_variance_) * randomness.fat_tailed();
  }

 private:
  double persistence_, step_, stationary_variance_, log_variance_;
};

std::vector<Date> weekdays(Date first, std::size_t count) {
  std::vector<Date> dates;
  for (Date date = first; dates.size() < count; date = date.plus_days(1))
    if (!date.is_weekend()) dates.push_back(date);
  return dates;
}

struct Calendar {
  int month;
  int day;
};

Calendar calendar_of(Date date) {
  const std::chrono::year_month_day parts(date.days());
  return {static_cast<int>(static_cast<unsigned>(parts.month())),
          static_cast<int>(static_cast<unsigned>(parts.day()))};
}

// Whether the instrument goes ex on that day: the first weekday of a payment month from the tenth on.
bool goes_ex(const Character& character, Date date) {
  if (character.payments_a_year == 0) return false;
  const Calendar at = calendar_of(date);
  const int months_between = 12 / character.payments_a_year;
  if ((at.month - character.first_month + 12) % months_between != 0 || at.day < payment_day_of_month)
    return false;
  for (Date before = date.plus_days(-1); calendar_of(before).month == at.month;
       before = before.plus_days(-1)) {
    if (calendar_of(before).day < payment_day_of_month) return true;
    if (!before.is_weekend()) return false;
  }
  return true;
}

double in_cents(double amount) {
  return std::max(1.0, std::round(amount * 100.0));
}

Decimal decimal_of_cents(double cents) {
  return Decimal::scaled(static_cast<int128>(cents), 2);
}

std::string month_of(Date date) {
  return date.to_string().substr(0, 7);
}

}  // namespace

ScenarioMarket invent_market(std::uint64_t seed, const ScenarioOptions& options) {
  ScenarioMarket market;
  market.dates = weekdays(options.first, options.nights);
  for (const Character& character : characters) market.instruments.emplace_back(character.id);
  market.closes.reserve(market.dates.size() * characters.size());

  Randomness randomness(seed);
  ChangingShock factor(0.985, 0.18, randomness);
  std::vector<ChangingShock> own;
  std::vector<double> prices;  // before rounding, so that rounding errors do not add up
  for (const Character& character : characters) {
    own.emplace_back(0.97, 0.18, randomness);
    prices.push_back(character.first_price);
  }

  const std::size_t split_day = options.nights * 47 / 100;
  for (std::size_t day = 0; day < market.dates.size(); ++day) {
    const double common = factor_daily_sd * factor.next(randomness);
    for (std::size_t i = 0; i < characters.size(); ++i) {
      const Character& character = characters[i];
      const double noise = character.daily_sd * own[i].next(randomness);
      Close close;
      close.date = market.dates[day];
      close.instrument = market.instruments[i];
      if (day > 0) {
        const double log_return =
            character.yearly_drift / trading_days_a_year + character.beta * common + noise;
        if (goes_ex(character, close.date)) {
          const double cents = in_cents(prices[i] * character.yearly_dividend / character.payments_a_year);
          close.dividend = decimal_of_cents(cents);
        }
        prices[i] *= std::exp(log_return);
        if (close.dividend) prices[i] -= close.dividend->to_double();
        if (character.split > 0 && day == split_day) {
          close.split = Decimal(character.split);
          prices[i] /= character.split;
        }
        // The market of an unlucky seed must not end below a cent.
        prices[i] = std::max(prices[i], 0.01);
      }
      close.close = decimal_of_cents(in_cents(prices[i]));
      market.closes.push_back(std::move(close));
    }
  }
  return market;
}

std::string closes_csv(const ScenarioMarket& market, std::size_t from, std::size_t to) {
  std::string text = "date,instrument,close,dividend,split\n";
  for (std::size_t day = from; day < to; ++day)
    for (std::size_t i = 0; i < market.instruments.size(); ++i) {
      const Close& close = market.at(day, i);
      text += close.date.to_string() + "," + close.instrument + "," + close.close.to_string_padded(2) + ",";
      if (close.dividend) text += close.dividend->to_string_padded(2);
      text += ",";
      if (close.split) text += close.split->to_string();
      text += "\n";
    }
  return text;
}

std::string closes_json_line(const ScenarioMarket& market, std::size_t day) {
  // Written by hand: the names hold nothing to escape, and the order of keys is the one that people read.
  std::string text = "{\"closes\":[";
  for (std::size_t i = 0; i < market.instruments.size(); ++i) {
    const Close& close = market.at(day, i);
    if (i > 0) text += ",";
    text += "{\"date\":\"" + close.date.to_string() + "\",\"instrument\":\"" + close.instrument +
            "\",\"close\":\"" + close.close.to_string_padded(2) + "\"";
    if (close.dividend) text += ",\"dividend\":\"" + close.dividend->to_string_padded(2) + "\"";
    if (close.split) text += ",\"split\":\"" + close.split->to_string() + "\"";
    text += "}";
  }
  return text + "]}";
}

std::string scenario_settings(const ScenarioMarket& market, std::uint64_t seed) {
  std::string instruments, all;
  for (const std::string& id : market.instruments) {
    instruments += "  - {id: " + id + ", currency: EUR, lot_size: 1}\n";
    all += (all.empty() ? "" : ", ") + id;
  }
  const std::string start = market.dates.front().to_string();
  return "# Settings of an invented market, written by `nightweigh scenario --seed " + std::to_string(seed) +
         "`.\n"
         "# The instruments do not exist, their closes come from a random number generator, and nothing "
         "here\n"
         "# is advice. Keys that are left out have their defaults.\n"
         "\n"
         "service:\n"
         "  data_dir: ./var             # database, lock, drop/ and endpoints.json; relative to this file\n"
         "  http: \"127.0.0.1:0\"         # port 0: any free port, written to var/endpoints.json\n"
         "  feed_socket: \"127.0.0.1:0\"  # likewise\n"
         "  drop_dir: drop              # var/drop: files of closes that are renamed into it are taken\n"
         "\n"
         "instruments:\n" +
         instruments +
         "\n"
         "books:\n"
         "  # Learns: each night the weights lean a little towards the instruments that did well.\n"
         "  - name: harbour\n"
         "    currency: EUR\n"
         "    time_zone: Europe/Berlin\n"
         "    instruments: [" +
         all +
         "]\n"
         "    start: {date: " +
         start +
         ", cash: {EUR: \"1000000.00\"}, holdings: {}}\n"
         "    strategy:\n"
         "      rule: exponentiated_gradient\n"
         "      eta: 0.05                 # how far it leans; larger follows faster and trades more\n"
         "    costs: {commission_bp: 2.0, half_spread_bp: 3.0}  # of the traded value, a side; 1 bp = 0.01 "
         "%\n"
         "    execution: assumed          # a paper book: sheets are filled at the modelled costs\n"
         "    execution_lag_nights: 1     # at the next night's closes\n"
         "\n"
         "  # Holds a policy mix: nothing is learned, and the question every night is only whether the "
         "drift\n"
         "  # has become worth the cost of moving back.\n"
         "  - name: meadow\n"
         "    currency: EUR\n"
         "    time_zone: Europe/Berlin\n"
         "    instruments: [ALDER, BRINE, DUNE, FJORD, GROVE]\n"
         "    start: {date: " +
         start +
         ", cash: {EUR: \"250000.00\"}, holdings: {}}\n"
         "    cash: {reserve: 0.02}       # two per cent stay in cash; the weights below share the rest\n"
         "    strategy:\n"
         "      rule: constant_mix\n"
         "      weights: {ALDER: 0.30, BRINE: 0.20, DUNE: 0.15, FJORD: 0.25, GROVE: 0.10}\n"
         "    costs:\n"
         "      commission_bp: 2.0\n"
         "      half_spread_bp: 3.0\n"
         "      lines:\n"
         "        GROVE: {half_spread_bp: 8.0}  # a small name, dearer to trade\n"
         "    execution: assumed\n"
         "    execution_lag_nights: 1\n";
}

std::vector<ScenarioFile> scenario_files(std::uint64_t seed, const ScenarioOptions& options) {
  const ScenarioMarket market = invent_market(seed, options);
  std::vector<ScenarioFile> files;
  files.push_back({"nightweigh.yaml", scenario_settings(market, seed)});
  const std::size_t monthly_end = market.dates.size() - std::min(options.last_days, market.dates.size());
  for (std::size_t from = 0; from < monthly_end;) {
    const std::string month = month_of(market.dates[from]);
    std::size_t to = from;
    while (to < monthly_end && month_of(market.dates[to]) == month) ++to;
    files.push_back({"closes/closes-" + month + ".csv", closes_csv(market, from, to)});
    from = to;
  }
  for (std::size_t day = monthly_end; day < market.dates.size(); ++day)
    files.push_back(
        {"last/closes-" + market.dates[day].to_string() + ".json", closes_json_line(market, day) + "\n"});
  return files;
}

}  // namespace nightweigh::commands
