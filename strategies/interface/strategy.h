// What every rule that moves weights looks like from outside. Pure mathematics: no clock, log, file,
// thread or daemon type.
#pragma once

#include <cstdint>
#include <memory>
#include <span>
#include <string>
#include <string_view>
#include <tl/expected.hpp>
#include <vector>

namespace nightweigh::strategies {

// Why a strategy would not do what it was asked: bad relatives, foreign state bytes, a parameter out of
// its domain. The strategy's state is as it was before the call.
struct Refusal {
  std::string problem;  // "relative of line 3 is -0.2"
  std::string remedy;   // "relatives are finite and not negative"
};

template <class T>
using Outcome = tl::expected<T, Refusal>;

inline tl::unexpected<Refusal> refuse(std::string problem, std::string remedy) {
  return tl::unexpected<Refusal>(Refusal{std::move(problem), std::move(remedy)});
}

// One day as a strategy sees it. relatives.size() == absent.size() == size().
// A relative is close today / close yesterday with splits and dividends in it: finite, >= 0, not all zero.
// absent[i] != 0: the line has no relative that day (not listed, suspended); its entry is ignored, and it
// earns what the portfolio itself earns.
struct Day {
  std::span<const double> relatives;
  std::span<const std::uint8_t> absent;
};

class Strategy {
 public:
  virtual ~Strategy() = default;

  virtual std::string_view rule() const = 0;
  virtual std::size_t size() const = 0;  // number of lines, m >= 1

  // Fold one day into the state. On refusal nothing has changed.
  virtual Outcome<void> learn(const Day& day) = 0;

  // Equal to learning the days one by one, bit for bit; stops at the first refusal, which names the day
  // (counted from 0), with the days before it learned.
  virtual Outcome<void> learn_block(std::span<const Day> days);

  // The weights wanted for the next day: m values, >= 0, sum 1 within 1e-12.
  virtual std::vector<double> weights() const = 0;

  // Stated numerical error of each of these weights, absolute.
  virtual std::vector<double> numerical_error() const = 0;

  // The fraction of one day's drift that the wanted weights follow, to first order: constant mix 0,
  // exponentiated gradient eta, buy and hold 1. The gate uses it.
  virtual double response() const = 0;

  // Days learned so far.
  virtual std::uint64_t days() const = 0;

  // The whole state as bytes (state_bytes.h); load_strategy in registry.h is the inverse.
  virtual std::string save() const = 0;

  virtual std::unique_ptr<Strategy> clone() const = 0;
};

// Shared by every rule: nullopt where the day can be learned by a strategy of m lines, else what is wrong.
// Checks sizes, finiteness, sign, and that a present line has a positive relative somewhere.
Outcome<void> check_day(const Day& day, std::size_t m);

}  // namespace nightweigh::strategies
