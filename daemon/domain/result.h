// Expected failures are values: a Result<T> holds either a T or an Error that says where it happened,
// what was wrong with which value, and what to do about it. Exceptions and assertions are for our own bugs.
#pragma once

#include <string>
#include <tl/expected.hpp>
#include <vector>

namespace nightweigh {

enum class ErrorKind {
  bad_input,     // a batch, a line, a request that breaks the format's rules
  bad_settings,  // the settings file
  conflict,      // contradicts what is already stored
  not_found,     //
  not_built,     // a feature that this version does not have; refused by name, never ignored
  limit,         // larger than a stated limit
  storage,       // the database or the file system said no
  corrupted,     // stored bytes are not what their digest says
  busy,          // somebody else holds it
};

struct Error {
  ErrorKind kind = ErrorKind::bad_input;
  std::string place;    // file, line, row, column or key: "closes.csv, row 3, column close"
  std::string problem;  // "is not a number"
  std::string value;    // the offending text, shortened; empty if there is none
  std::string remedy;   // what to do: "write a decimal number like 61.20"

  // place: problem: "value". remedy
  std::string message() const;
};

using Errors = std::vector<Error>;

template <class T>
using Result = tl::expected<T, Error>;

template <class T>
using ResultOrErrors = tl::expected<T, Errors>;

inline tl::unexpected<Error> failure(Error error) {
  return tl::unexpected<Error>(std::move(error));
}

// The wire name of a kind: "bad_input", ...
const char* name_of(ErrorKind kind);

// At most max_bytes of text, printable: control bytes and invalid UTF-8 shown as \xNN, "..." where cut.
std::string shown(const std::string& text, std::size_t max_bytes = 80);

}  // namespace nightweigh
