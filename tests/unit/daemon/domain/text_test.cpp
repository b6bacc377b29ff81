// Errors as text, identifiers, minor units, UTF-8.
#include <doctest/doctest.h>

#include <set>

#include "daemon/domain/instrument.h"
#include "daemon/domain/result.h"
#include "daemon/domain/utf8.h"

namespace nightweigh {
namespace {

TEST_CASE("an error's message names place, problem, value and remedy") {
  CHECK(Error{ErrorKind::bad_input, "row 3", "is not a number", "x", "write 61.20"}.message() ==
        "row 3: is not a number: \"x\". Write 61.20");
  CHECK(Error{ErrorKind::bad_input, "", "is empty", "", ""}.message() == "is empty");
  CHECK(Error{ErrorKind::bad_input, "a", "is empty", "", "ALDER is known"}.message() ==
        "a: is empty. ALDER is known");
}

TEST_CASE("kinds have names of their own") {
  std::set<std::string> names;
  for (const ErrorKind kind :
       {ErrorKind::bad_input, ErrorKind::bad_settings, ErrorKind::conflict, ErrorKind::not_found,
        ErrorKind::not_built, ErrorKind::limit, ErrorKind::storage, ErrorKind::corrupted, ErrorKind::busy}) {
    names.insert(name_of(kind));
  }
  CHECK(names.size() == 9);
  CHECK(std::string(name_of(ErrorKind::not_built)) == "not_built");
}

TEST_CASE("shown text is printable, short and whole") {
  CHECK(shown("plain") == "plain");
  CHECK(shown("a\nb\x1b[0m\x7f") == "a\\x0ab\\x1b[0m\\x7f");
  CHECK(shown(std::string("a\0b", 3)) == "a\\x00b");
  CHECK(shown("caf\xc3\xa9") == "caf\xc3\xa9");
  CHECK(shown("\xc3\x28") == "\\xc3(");
  CHECK(shown("\xc2\x9b") == "\\xc2\\x9b");  // U+009B, which starts terminal commands
  CHECK(shown(std::string(80, 'x')) == std::string(80, 'x'));
  CHECK(shown(std::string(81, 'x')) == std::string(80, 'x') + "...");
  CHECK(shown("abc\xf0\x9f\x8c\x8a", 6) == "abc...");  // never half a character
  CHECK(shown("", 0).empty());
}

TEST_CASE("well-formed UTF-8") {
  // Table 3-7 of the Unicode standard, and RFC 3629 section 10's ill-formed examples.
  for (const char* good : {"", "a", "\xc2\x80", "\xdf\xbf", "\xe0\xa0\x80", "\xed\x9f\xbf", "\xee\x80\x80",
                           "\xef\xbf\xbf", "\xf0\x90\x80\x80", "\xf4\x8f\xbf\xbf"}) {
    CAPTURE(good);
    CHECK_FALSE(first_invalid_utf8(good).has_value());
  }
  for (const char* bad :
       {"\x80", "\xc0\x80", "\xc1\xbf", "\xc2", "\xc2\x41", "\xe0\x9f\xbf", "\xe0\xa0", "\xed\xa0\x80",
        "\xf0\x8f\xbf\xbf", "\xf0\x90\x80", "\xf4\x90\x80\x80", "\xf5\x80\x80\x80", "\xff"}) {
    CAPTURE(bad);
    CHECK(first_invalid_utf8(bad) == 0U);
  }
  CHECK(first_invalid_utf8("ab\xc3\xa9\xff") == 4U);
}

TEST_CASE("instrument ids") {
  for (const char* good : {"A", "ALDER", "0", "7.B_X-1", "CASHEW", "ABCDEFGHIJKLMNOPQRSTUVWXYZ012345"}) {
    CAPTURE(good);
    CHECK(is_instrument_id(good));
  }
  for (const char* bad : {"", "CASH", "alder", ".A", "-A", "_A", "A B", "A/B", "A\n", "\xc3\x84",
                          "ABCDEFGHIJKLMNOPQRSTUVWXYZ0123456"}) {
    CAPTURE(bad);
    CHECK_FALSE(is_instrument_id(bad));
  }
}

TEST_CASE("currencies") {
  // ISO 4217, list one: minor units.
  for (const char* code : {"JPY", "KRW", "CLP", "ISK", "VND", "XAF", "XOF", "XPF"})
    CHECK(minor_units(code) == 0);
  for (const char* code : {"BHD", "IQD", "JOD", "KWD", "LYD", "OMR", "TND"}) CHECK(minor_units(code) == 3);
  for (const char* code : {"CLF", "UYW"}) CHECK(minor_units(code) == 4);
  for (const char* code : {"EUR", "USD", "GBP", "CHF"}) CHECK(minor_units(code) == 2);
  CHECK(is_currency_code("EUR"));
  for (const char* bad : {"", "EU", "EURO", "eur", "E1R"}) CHECK_FALSE(is_currency_code(bad));
}

TEST_CASE("the smallest quantity") {
  Instrument instrument;
  CHECK(instrument.is_fractional());
  CHECK(instrument.smallest_quantity() == Decimal::scaled(1, 8));
  instrument.lot_size = Decimal(10);
  CHECK(instrument.smallest_quantity() == Decimal(1));
}

}  // namespace
}  // namespace nightweigh
