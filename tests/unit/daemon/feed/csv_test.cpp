// parse_csv against RFC 4180 (the rules are cited by their numbers in its section 2) and against the
// mistakes that data jobs make.
#include <algorithm>
#include <chrono>
#include <string>

#include "expect.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::feed {
namespace {

const Limits limits;
ParsedBatch csv(std::string_view text) {
  return parse_csv(text, limits);
}
// One row of date, instrument and the given close.
ParsedBatch with_close(std::string_view close) {
  return csv("date,instrument,close\n2026-03-02,ALDER," + std::string(close) + "\n");
}
ParsedBatch with(const std::string& column, std::string_view value) {
  return csv("date,instrument,close," + column + "\n2026-03-02,ALDER,61.20," + std::string(value) + "\n");
}

TEST_CASE("a plain batch") {
  const std::string text =
      "date,instrument,close,revision,dividend,split\n"
      "2026-03-02,ALDER,61.20,,,\n"
      "2026-03-02,BRINE,7,3,0.25,2\n";
  const ParsedBatch batch = csv(text);
  INFO(all_messages(batch));
  REQUIRE(batch.ok());
  CHECK(batch.digest == sha256_hex(text));
  REQUIRE(batch.rows.size() == 2);
  CHECK(batch.rows[0].row == 1);
  CHECK(batch.rows[0].close ==
        Close{*Date::parse("2026-03-02"), "ALDER", 0, *Decimal::parse("61.2"), {}, {}});
  CHECK(batch.rows[1].close ==
        Close{*Date::parse("2026-03-02"), "BRINE", 3, Decimal(7), *Decimal::parse("0.25"), Decimal(2)});
}

TEST_CASE("the digest is SHA-256 of the bytes (value of `printf 'abc' | sha256sum`, FIPS 180-4 example)") {
  CHECK(csv("abc").digest == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
}

TEST_CASE("columns in any order; forms that RFC 4180 allows") {
  for (const std::string_view text : {
           "close,date,instrument\n61.20,2026-03-02,ALDER\n",
           "close,date,instrument\r\n61.20,2026-03-02,ALDER\r\n",  // 2.1 CRLF
           "close,date,instrument\n61.20,2026-03-02,ALDER",        // 2.2 no last line break
           "\"close\",\"date\",\"instrument\"\n\"61.20\",\"2026-03-02\",\"ALDER\"\n",  // 2.5 quotes
           "\xEF\xBB\xBF"
           "close,date,instrument\n61.20,2026-03-02,ALDER\n",        // byte order mark
           "close,date,instrument\n61.20,2026-03-02,ALDER\n\n\r\n",  // empty lines at the end
       }) {
    const ParsedBatch batch = csv(text);
    INFO(text << all_messages(batch));
    REQUIRE(batch.ok());
    REQUIRE(batch.rows.size() == 1);
    CHECK(batch.rows[0].close.instrument == "ALDER");
    CHECK(batch.rows[0].close.close == *Decimal::parse("61.2"));
  }
}

TEST_CASE(
    "quoted fields keep commas, line breaks and doubled quotes, and rows are still counted (2.6, 2.7)") {
  // None of these is a good id; the messages show what was read.
  expect_one(csv("date,instrument,close\n2026-03-02,\"AL,DER\",1\n"), 1, "instrument", "\"AL,DER\"");
  expect_one(csv("date,instrument,close\n2026-03-02,\"AL\"\"DER\"\"\",1\n"), 1, "instrument",
             "\"AL\"DER\"\"");
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER,1\n2026-03-02,\"AL\r\nDER\",1\n"), 2, "instrument",
             "AL\\x0d\\x0aDER");
  const ParsedBatch batch = csv("date,instrument,close\n2026-03-02,\"A\n\",1\n2026-03-02,\"B \"\"\",x\n");
  REQUIRE(batch.errors.size() == 3);
  CHECK(batch.errors[2].row == 2);
  CHECK(batch.errors[2].value == "x");
}

TEST_CASE("broken CSV") {
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER,1\n2026-03-02,\"ALDER,1\n"), 2, "", "never closed");
  expect_one(csv("date,instrument,close\n2026-03-02,\"ALDER\"X,1\n"), 1, "", "text after a closing quote");
  expect_one(csv("date,instrument,close\n2026-03-02,AL\"DER,1\n"), 1, "", "quote inside an unquoted field");
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER,1\r2026-03-03,ALDER,1\r"), 1, "",
             "carriage return");
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER,61,20\n"), 1, "",
             "has 4 fields where the header has 3");
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER\n"), 1, "", "has 2 fields where the header has 3");
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER,1\n\n2026-03-03,ALDER,1\n"), 2, "",
             "is an empty line");
  expect_one(csv(""), 0, "", "no header row");
  expect_one(csv("\n"), 0, "", "no header row");
  expect_one(csv("\xEF\xBB\xBF"), 0, "", "no header row");
  expect_one(csv("date,instrument,close\n"), 0, "", "has no rows");
  expect_one(csv("date,instrument,close"), 0, "", "has no rows");
  expect_one(csv("date;instrument;close\n2026-03-02;ALDER;61,20\n"), 0, "", "not separated by commas");
  expect_one(csv("date\tinstrument\tclose\n"), 0, "", "not separated by commas");
}

TEST_CASE("columns are refused by name") {
  expect_one(csv("date,instrument\n2026-03-02,ALDER\n"), 0, "close", "missing from the header row");
  expect_one(csv("date,instrument,close,close\n"), 0, "close", "stands twice");
  expect_one(csv("date,instrument,close,remark\n"), 0, "remark", "unknown column");
  expect_one(csv("date,instrument,close,\n"), 0, "", "without a name");
  const ParsedBatch spaced = csv("date, instrument,close\n");
  REQUIRE(spaced.errors.size() == 2);  // unknown " instrument", and instrument is missing
  CHECK(contains(spaced.errors[0].message(), "Write it as instrument: lower case, without spaces"));
  for (const std::string name : {"volume", "pay_date", "relative", "currency"}) {
    expect_one(csv("date,instrument,close," + name + "\n2026-03-02,ALDER,1,2\n"), 0, name,
               "this version does not read the column " + name + ". Leave it out", ErrorKind::not_built);
  }
  std::string wide = "date,instrument,close";
  for (int i = 0; i < 1'000'000; ++i) wide += ',';
  expect_one(csv(wide), 0, "", "more than 32 columns", ErrorKind::limit);
  expect_one(csv("date,instrument,close\n" + std::string(1'000'000, ',')), 1, "", "has 1000001 fields");
}

TEST_CASE("encoding") {
  expect_one(csv("date,instrument,close\n2026-03-02,ALDER,1\n2026-03-02,\xC4LDER,1\n"), 2, "",
             "is not valid UTF-8 at byte 53: \"\\xc4LDER");
  // Overlong, surrogate, beyond U+10FFFF, cut: RFC 3629 sections 3 and 10.
  for (const std::string_view bad :
       {"\xC0\xAF", "\xED\xA0\x80", "\xF4\x90\x80\x80", "\xE2\x82", "\x80", "\xFF"}) {
    expect_one(csv("date,instrument,close\n2026-03-02,A" + std::string(bad)), 1, "",
               "is not valid UTF-8 at byte 35");
  }
  expect_one(csv("date,instrument,close\n2026-03-02,A" + std::string(1, '\0') + "B,1\n"), 1, "",
             "NUL byte at byte 35");
  std::string utf16 = "\xFF\xFE";
  for (const char c : std::string("date,instrument,close\n")) utf16 += std::string{c, '\0'};
  expect_one(csv(utf16), 0, "", "looks like UTF-16");
  expect_one(csv(utf16.substr(2)), 0, "", "looks like UTF-16");
  // Well-formed UTF-8 is no fault of encoding, but no id either.
  expect_one(csv("date,instrument,close\n2026-03-02,\xC3\x84LDER,1\n"), 1, "instrument", "\"\xC3\x84LDER\"");
}

TEST_CASE("closes that are no plain positive numbers are refused with the remedy that fits") {
  const struct {
    std::string_view value, words;
  } cases[] = {
      {"", "is empty"},
      {"abc", "is not a decimal number: \"abc\". Write a decimal number like 61.20"},
      {"12a", "is not a decimal number"},
      {"0x10", "is not a decimal number"},
      {"1_000", "is not a decimal number"},
      {"-", "is not a decimal number"},
      {".", "is not a decimal number"},
      {"1.2.3", "is not a decimal number"},
      {"--1", "is not a decimal number"},
      {"\xE2\x82\xAC"
       "61",
       "is not a decimal number"},
      {"inf", "is not a finite number"},
      {"-Infinity", "is not a finite number"},
      {"nan", "is not a finite number"},
      {"NaN(1)", "is not a finite number"},
      {"1e5", "is written with an exponent"},
      {"6.12E+1", "is written with an exponent"},
      {"\"1,5\"", "has a comma"},
      {"\"1,234.50\"", "has a comma"},
      {"12.", "ends with the decimal point"},
      {".5", "starts with the decimal point"},
      {"+61", "has a plus sign"},
      {" 61", "has spaces around it"},
      {"61 ", "has spaces around it"},
      {"\t61", "has spaces around it"},
      {"0", "is zero"},
      {"0.000", "is zero"},
      {"-0", "is zero"},
      {"-61.20", "is negative"},
      {"1234567890123", "more than 12 digits before the point"},
      {"1.12345678901", "more than 10 after it"},
  };
  for (const auto& test : cases) {
    INFO(std::string(test.value));
    expect_one(with_close(test.value), 1, "close", test.words);
  }
  // A field of a megabyte is shown in part.
  const ParsedBatch huge = with_close(std::string(1'000'000, '9'));
  expect_one(huge, 1, "close", "more than 12 digits");
  CHECK(huge.errors[0].value.size() < 200);
}

TEST_CASE("closes at the edges of what is allowed") {
  for (const auto& [text, plain] : {std::pair{"999999999999.9999999999", "999999999999.9999999999"},
                                    {"0.0000000001", "0.0000000001"},
                                    {"0000000000000061.2000000000000", "61.2"}}) {
    const ParsedBatch batch = with_close(text);
    INFO(all_messages(batch));
    REQUIRE(batch.ok());
    CHECK(batch.rows[0].close.close.to_string() == plain);
  }
}

TEST_CASE("dates and instruments") {
  for (const auto& [date, words] : {std::pair{"", "is empty"},
                                    {"2026-3-2", "is not an ISO 8601 date"},
                                    {"20260302", "is not an ISO 8601 date"},
                                    {"02.03.2026", "is not an ISO 8601 date"},
                                    {"2026-03-02T00:00:00", "is not an ISO 8601 date"},
                                    {" 2026-03-02", "is not an ISO 8601 date"},
                                    {"2026-02-29", "is not a day of the calendar"},
                                    {"2026-13-01", "is not a day of the calendar"},
                                    {"2026-00-10", "is not a day of the calendar"},
                                    {"0026-03-02", "is not a year from 1900 to 2199"},
                                    {"2200-01-01", "is not a year from 1900 to 2199"}}) {
    expect_one(csv("date,instrument,close\n" + std::string(date) + ",ALDER,1\n"), 1, "date", words);
  }
  CHECK(csv("date,instrument,close\n2024-02-29,ALDER,1\n").ok());
  for (const auto& [id, words] :
       {std::pair{"", "is empty"},
        {"alder", "is not the form of an instrument's id"},
        {" ALDER", "is not the form of an instrument's id"},
        {".ALDER", "is not the form of an instrument's id"},
        {"A123456789012345678901234567890123", "is not the form of an instrument's id"},
        {"CASH", "is the name of the cash line"}}) {
    expect_one(csv("date,instrument,close\n2026-03-02," + std::string(id) + ",1\n"), 1, "instrument", words);
  }
}

TEST_CASE("revision, dividend, split") {
  for (const auto& [text, value] :
       {std::pair{"", 0}, {"0", 0}, {"1", 1}, {"999999", 999999}, {"000012", 12}}) {
    const ParsedBatch batch = with("revision", text);
    REQUIRE(batch.ok());
    CHECK(batch.rows[0].close.revision == value);
  }
  for (const std::string_view text : {"-1", "1.0", "1e3", "1000000", "99999999999999999999", "x", " 1"}) {
    expect_one(with("revision", text), 1, "revision", "is not a whole number from 0 to 999999");
  }
  for (const std::string_view none : {"", "0", "0.00", "-0"}) {
    const ParsedBatch batch = with("dividend", none);
    REQUIRE(batch.ok());
    CHECK_FALSE(batch.rows[0].close.dividend.has_value());
  }
  CHECK(with("dividend", "0.55").rows.at(0).close.dividend == *Decimal::parse("0.55"));
  expect_one(with("dividend", "-0.55"), 1, "dividend", "is negative");
  expect_one(with("dividend", "5%"), 1, "dividend", "is not a decimal number");
  for (const std::string_view none : {"", "1", "1.000"}) {
    const ParsedBatch batch = with("split", none);
    REQUIRE(batch.ok());
    CHECK_FALSE(batch.rows[0].close.split.has_value());
  }
  CHECK(with("split", "0.1").rows.at(0).close.split == *Decimal::parse("0.1"));
  CHECK(with("split", "0.000001").ok());
  CHECK(with("split", "1000000").ok());
  expect_one(with("split", "0.0000009"), 1, "split", "is not between 0.000001 and 1000000");
  expect_one(with("split", "1000000.1"), 1, "split", "is not between 0.000001 and 1000000");
  expect_one(with("split", "0"), 1, "split", "is zero");
  expect_one(with("split", "-2"), 1, "split", "is negative");
  expect_one(with("split", "3:2"), 1, "split", "Write the split as a decimal number: 1.5 for 3:2",
             ErrorKind::not_built);
}

TEST_CASE("repetitions are dropped, contradictions name both rows") {
  const ParsedBatch same = csv(
      "date,instrument,close,split\n2026-03-02,ALDER,61.20,\n2026-03-02,BRINE,5,\n2026-03-02,ALDER,61.2,1\n");
  INFO(all_messages(same));
  REQUIRE(same.ok());
  REQUIRE(same.rows.size() == 2);
  CHECK(same.rows[0].row == 1);
  CHECK(same.rows[1].close.instrument == "BRINE");

  expect_one(
      csv("date,instrument,close\n2026-03-02,ALDER,61.20\n2026-03-02,BRINE,5\n2026-03-02,ALDER,61.30\n"), 3,
      "close", "contradicts row 1, which says 61.2 for ALDER on 2026-03-02, revision 0: \"61.3\"");
  expect_one(csv("date,instrument,close,dividend\n2026-03-02,ALDER,61,\n2026-03-02,ALDER,61,0.5\n"), 2,
             "dividend", "contradicts row 1, which says none");
  // Another revision is another row; so is another date.
  CHECK(csv("date,instrument,close,revision\n2026-03-02,ALDER,61,\n2026-03-02,ALDER,62,1\n2026-03-03,ALDER,"
            "62,\n")
            .rows.size() == 3);
}

TEST_CASE("every mistake is reported, up to the limit") {
  const ParsedBatch batch =
      csv("date,instrument,close\nx,alder,-1\n2026-03-02,ALDER,1\n2026-03-03,ALDER,y\n");
  REQUIRE(batch.errors.size() == 4);
  CHECK(batch.errors[0].column == "date");
  CHECK(batch.errors[1].column == "instrument");
  CHECK(batch.errors[2].column == "close");
  CHECK(batch.errors[3].row == 3);

  Limits few;
  few.errors_max = 5;
  std::string text = "date,instrument,close\n";
  for (int i = 0; i < 6; ++i) text += "x,ALDER,1\n";
  const ParsedBatch many = parse_csv(text, few);
  REQUIRE(many.errors.size() == 6);
  CHECK(contains(many.errors.back().message(), "more mistakes than these 5"));
  CHECK(parse_csv(text.substr(0, text.size() - 10), few).errors.size() == 5);
}

TEST_CASE("limits") {
  Limits small;
  small.rows_max = 2;
  const std::string two = "date,instrument,close\n2026-03-02,ALDER,1\n2026-03-03,ALDER,1\n";
  CHECK(parse_csv(two, small).ok());
  expect_one(parse_csv(two + "2026-03-04,ALDER,1\n", small), 3, "", "limit of 2 rows", ErrorKind::limit);
  small.bytes_max = two.size();
  CHECK(parse_csv(two, small).ok());
  expect_one(parse_csv(two + "\n", small), 0, "", "more than the limit of", ErrorKind::limit);
}

TEST_CASE("ten thousand rows") {
  std::string text = "date,instrument,close,revision\n";
  for (int day = 0; day < 1000; ++day) {
    for (const char* id :
         {"ALDER", "BRINE", "COPPER", "DRIFT", "EMBER", "FLINT", "GORSE", "HAZEL", "IRON", "JUNIPER"}) {
      text += Date::parse("2020-01-01")->plus_days(day).to_string() + "," + id + "," +
              std::to_string(50 + day % 17) + ".37,0\n";
    }
  }
  std::chrono::duration<double, std::milli> took =
      std::chrono::hours(1);  // the best of a few: others work here too
  for (int i = 0; i < 5; ++i) {
    const auto start = std::chrono::steady_clock::now();
    const ParsedBatch batch = csv(text);
    took = std::min<decltype(took)>(took, std::chrono::steady_clock::now() - start);
    CHECK(batch.rows.size() == 10'000);
  }
  MESSAGE("10,000 rows of CSV, " << text.size() << " bytes: " << took.count() << " ms");
}

}  // namespace
}  // namespace nightweigh::feed
