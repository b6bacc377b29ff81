// The settings file: one YAML document, checked whole before anything uses it. Every problem is reported
// at once, with file, line, column and key.
#pragma once

#include <cstdint>
#include <filesystem>
#include <string>
#include <vector>

#include "daemon/domain/book_settings.h"
#include "daemon/domain/instrument.h"
#include "daemon/domain/result.h"

namespace nightweigh::settings {

// Where a server listens: TCP on a loopback address, a Unix-domain socket, or nowhere.
struct Endpoint {
  enum class Kind { off, tcp, unix_socket } kind = Kind::off;
  std::string address;         // tcp: "127.0.0.1" or "::1"
  std::uint16_t port = 0;      // tcp: 0 = any free port
  std::filesystem::path path;  // unix_socket
};

struct ServiceSettings {
  // Relative paths in the file are taken from the file's folder (data_dir, calendars) or from data_dir
  // (sockets, drop_dir, outbox_dir); here all are absolute.
  std::filesystem::path data_dir;
  Endpoint http;
  Endpoint feed_socket;
  std::filesystem::path drop_dir;    // empty = off
  std::filesystem::path outbox_dir;  // empty = off
  std::string log_level = "info";    // trace | debug | info | warn | error
};

struct Settings {
  std::filesystem::path file;
  ServiceSettings service;
  std::vector<Instrument> instruments;
  std::vector<BookSettings> books;
};

// Reads and checks a file, and resolve()s each book. Errors are in the order of the file, each with its
// place like "nightweigh.yaml:12:5 books[0].gate.extra_gain". A file has at most 1 MB, 16 levels of
// nesting, 20,000 instruments, 500 books and 1,000 instruments a book.
ResultOrErrors<Settings> load(const std::filesystem::path& file);

// The same for text at hand; `file` only names it in errors and anchors relative paths.
ResultOrErrors<Settings> parse(const std::string& text, const std::filesystem::path& file);

// Makes book.resolved_text and book.digest from the other members: canonical JSON (keys sorted, no
// spaces, decimals as strings, doubles in a form that reads back as the same double) and its SHA-256.
// Weights left out for constant_mix are written as the equal weights that they stand for.
void resolve(BookSettings& book);

// What a book with nights cannot change (start, currency, instruments): the first such key that differs
// between two resolved texts of a book, or empty.
std::string fixed_key_that_differs(const std::string& before, const std::string& now);

}  // namespace nightweigh::settings
