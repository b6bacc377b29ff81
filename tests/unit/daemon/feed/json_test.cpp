// parse_json against RFC 8259 and against hostile text.
#include <algorithm>
#include <chrono>
#include <string>

#include "expect.h"
#include "strategies/digest/sha256.h"

namespace nightweigh::feed {
namespace {

const Limits limits;
ParsedBatch json(std::string_view text) {
  return parse_json(text, limits);
}
ParsedBatch row(std::string_view members) {
  return json(R"({"closes":[{)" + std::string(members) + "}]}");
}
ParsedBatch with_close(std::string_view value) {
  return row(R"("date":"2026-03-02","instrument":"ALDER","close":)" + std::string(value));
}
ParsedBatch with(std::string_view members) {
  return with_close("1," + std::string(members));
}

TEST_CASE("a plain batch, strings or numbers, exact to the last digit") {
  const std::string text =
      R"({"closes":[{"date":"2026-03-02","instrument":"ALDER","close":"61.20"},)"
      R"( {"split":2,"close":0.1000000000,"revision":4,"dividend":"0.25","instrument":"BRINE","date":"2026-03-02"}]})";
  const ParsedBatch batch = json(text);
  INFO(all_messages(batch));
  REQUIRE(batch.ok());
  CHECK(batch.digest == sha256_hex(text));
  REQUIRE(batch.rows.size() == 2);
  CHECK(batch.rows[0].close ==
        Close{*Date::parse("2026-03-02"), "ALDER", 0, *Decimal::parse("61.2"), {}, {}});
  CHECK(batch.rows[1].close == Close{*Date::parse("2026-03-02"), "BRINE", 4, *Decimal::parse("0.1"),
                                     *Decimal::parse("0.25"), Decimal(2)});
  // 22 digits, more than a double holds.
  for (const std::string_view exact : {"999999999999.9999999999", "123456789012.0123456789"}) {
    CHECK(with_close(exact).rows.at(0).close.close.to_string() == exact);
    CHECK(with_close("\"" + std::string(exact) + "\"").rows.at(0).close.close.to_string() == exact);
  }
  CHECK(with(R"("dividend":null,"split":null,"revision":null)").ok());
  CHECK(with(R"("dividend":"","split":"","revision":"")").ok());
  CHECK(with_close("\"\\u0036\\u0031\"").rows.at(0).close.close == Decimal(61));  // escapes are JSON's
  CHECK(json(" {\t\"closes\" :\r\n[ {\"date\":\"2026-03-02\",\"instrument\":\"ALDER\",\"close\":1} ] }\n")
            .ok());
}

TEST_CASE("the same words as for CSV") {
  const std::string head = "date,instrument,close\n2026-03-02,ALDER,";
  for (const std::string value : {"abc", "12.", ".5", " 61", "1e5", "inf", "-1", "0", ""}) {
    const ParsedBatch by_csv = parse_csv(head + value + "\n", limits),
                      by_json = with_close("\"" + value + "\"");
    REQUIRE(by_csv.errors.size() == 1);
    CHECK(all_messages(by_csv) == all_messages(by_json));
  }
}

TEST_CASE("numbers are read from their text") {
  expect_one(with_close("1e5"), 1, "close", "is written with an exponent: \"1e5\"");
  expect_one(with_close("6.12E1"), 1, "close", "is written with an exponent: \"6.12E1\"");
  expect_one(with_close("0"), 1, "close", "is zero");
  expect_one(with_close("-61.20"), 1, "close", "is negative: \"-61.20\"");
  expect_one(with_close("18446744073709551616"), 1, "close", "more than 12 digits");
  expect_one(with_close("1e999"), 1, "", "far beyond every price");
  expect_one(with_close("NaN"), 1, "", "JSON has no NaN");
  expect_one(with_close("Infinity"), 1, "", "JSON has no NaN");
  expect_one(with_close("-Infinity"), 1, "", "JSON has no NaN");
  expect_one(with_close("nan"), 1, "", "JSON has no NaN");
  expect_one(with_close("01"), 1, "", "is not valid JSON");
  expect_one(with_close(".5"), 1, "", "is not valid JSON");
  expect_one(with_close("+1"), 1, "", "is not valid JSON");
  expect_one(with_close("1."), 1, "", "is not valid JSON");
  expect_one(with_close("0x10"), 1, "", "is not valid JSON");
  expect_one(with(R"("revision":1.0)"), 1, "revision", "is not a whole number");
  expect_one(with(R"("revision":-1)"), 1, "revision", "is not a whole number");
}

TEST_CASE("keys and types") {
  expect_one(row(R"("date":"2026-03-02","instrument":"ALDER")"), 1, "close", "is missing");
  expect_one(with(R"("remark":"x")"), 1, "remark", "unknown column");
  expect_one(with(R"("Close":"x")"), 1, "Close", "Write it as close");
  for (const std::string name : {"volume", "pay_date", "relative", "currency"}) {
    expect_one(with("\"" + name + "\":[1,{\"a\":2}]"), 1, name, "this version does not read the column",
               ErrorKind::not_built);
  }
  expect_one(with(R"("close":2)"), 1, "close", "stands twice in one object");
  expect_one(with(R"("close":1)"), 1, "close", "stands twice in one object");
  expect_one(with(R"("cl\u006fse":2)"), 1, "close", "stands twice in one object");
  expect_one(with_close("true"), 1, "close", "is true or false");
  expect_one(with_close("null"), 1, "close", "is null");
  expect_one(with_close("[1]"), 1, "close", "is an array");
  expect_one(with_close(R"({"value":1})"), 1, "close", "is an object");
  expect_one(row(R"("date":20260302,"instrument":"ALDER","close":1)"), 1, "date",
             "is a number: \"20260302\"");
  expect_one(row(R"("date":"2026-03-02","instrument":7,"close":1)"), 1, "instrument", "is a number");
  expect_one(json(R"({"closes":[]})"), 0, "", "has no rows");
  expect_one(json("{}"), 0, "closes", "is missing");
  expect_one(json(R"({"closes":{}})"), 0, "closes", "is an object, not an array");
  expect_one(json(R"({"closes":5})"), 0, "closes", "is not an array");
  expect_one(json(R"({"closes":[5]})"), 1, "", "is not an object");
  expect_one(json(R"({"closes":[[1,2]]})"), 1, "", "is an array, not an object");
  expect_one(json(R"([{"closes":[]}])"), 0, "", "is an array, not an object");
  expect_one(json("5"), 0, "", "is not a JSON object");
  expect_one(json(R"("closes")"), 0, "", "is not a JSON object");
  expect_one(json(R"({"closes":[{"date":"2026-03-02","instrument":"ALDER","close":1}],"closes":[]})"), 0,
             "closes", "stands twice in one object");
  expect_one(json(R"({"closes":[{"date":"2026-03-02","instrument":"ALDER","close":1}],"rows":[[]]})"), 0,
             "rows", "is an unknown key");
}

TEST_CASE("a token is refused and never repeated") {
  const ParsedBatch batch =
      json(R"({"token":"very secret","closes":[{"date":"2026-03-02","instrument":"ALDER","close":1}]})");
  expect_one(batch, 0, "token", "this version asks for no token. Leave it out", ErrorKind::not_built);
  CHECK_FALSE(contains(all_messages(batch), "secret"));
}

TEST_CASE("broken text") {
  const std::string good = R"({"closes":[{"date":"2026-03-02","instrument":"ALDER","close":1}]})";
  REQUIRE(json(good).ok());
  // Cut anywhere: refused, nothing of it is taken for a batch.
  for (std::size_t size = 0; size < good.size(); ++size) {
    const ParsedBatch batch = json(good.substr(0, size));
    INFO(good.substr(0, size) << " -> " << all_messages(batch));
    CHECK_FALSE(batch.ok());
    CHECK(contains(all_messages(batch), size == 0 ? "is empty" : "ends in the middle"));
  }
  expect_one(json(good + "x"), 0, "", "text after the end of the batch");
  expect_one(json(good + good), 0, "", "text after the end of the batch");
  expect_one(json(good + "// remark"), 0, "", "text after the end of the batch");
  expect_one(json("\xEF\xBB\xBF" + good), 0, "", "starts with a byte order mark");
  expect_one(json(good + std::string(1, '\0')), 0, "", "NUL byte at byte " + std::to_string(good.size() + 1));
  expect_one(json("{\"closes\":[{\"date\":\"2026\xFF\"}]}"), 0, "", "is not valid UTF-8 at byte 25");
  expect_one(with_close("'1'"), 1, "", "is not valid JSON");
  expect_one(row(R"(date:"2026-03-02")"), 1, "", "is not valid JSON");
  expect_one(with_close("1,"), 1, "", "is not valid JSON");
  expect_one(with_close("\"a\nb\""), 1, "", "is not valid JSON");
  expect_one(with_close(R"("\ud800")"), 1, "", "is not valid JSON");
  // An escaped NUL is text like any other.
  expect_one(with_close(R"("6\u00001")"), 1, "close", "is not a decimal number: \"6\\x001\"");
}

TEST_CASE("nesting is refused at the limit, at once") {
  const std::size_t million = 1'000'000;
  const std::string brackets(million, '[');
  expect_one(json(brackets), 0, "", "is an array, not an object");
  for (const std::string head :
       {R"({"closes":[)", R"({"closes":[{"close":)", R"({"other":)", R"({"closes":)"}) {
    const auto start = std::chrono::steady_clock::now();
    const ParsedBatch batch = json(head + brackets);
    const auto took = std::chrono::steady_clock::now() - start;
    REQUIRE_FALSE(batch.ok());
    CHECK(contains(all_messages(batch), "nests deeper than 32 levels"));
    CHECK(took < std::chrono::seconds(1));  // measured: a few ms, mostly SHA-256
  }
  std::string objects;
  for (std::size_t i = 0; i < million; ++i) objects += R"({"a":)";
  CHECK(contains(all_messages(json(objects)), "nests deeper than 32 levels"));
  // 32 levels in a refused value are passed over, and reading goes on behind them.
  const std::string deep =
      with("\"volume\":" + std::string(29, '[') + std::string(29, ']')).errors.at(0).message();
  CHECK(contains(deep, "does not read the column volume"));
}

TEST_CASE("repetitions, contradictions, limits") {
  const auto item = [](const std::string& close) {
    return R"({"date":"2026-03-02","instrument":"ALDER","close":)" + close + "}";
  };
  CHECK(json(R"({"closes":[)" + item("\"61.20\"") + "," + item("61.2") + "]}").rows.size() == 1);
  expect_one(json(R"({"closes":[)" + item("\"61.20\"") + "," + item("61.3") + "]}"), 2, "close",
             "contradicts row 1");
  Limits small;
  small.rows_max = 1;
  expect_one(parse_json(R"({"closes":[)" + item("1") + "," + item("1") + "]}", small), 2, "",
             "limit of 1 rows", ErrorKind::limit);
  small.errors_max = 3;
  std::string many = R"({"closes":[1)";
  for (int i = 0; i < 100; ++i) many += ",1";
  CHECK(parse_json(many + "]}", small).errors.size() == 4);
  small.bytes_max = 10;
  expect_one(parse_json(R"({"closes":[]})", small), 0, "", "limit of 10", ErrorKind::limit);
}

TEST_CASE("ten thousand rows") {
  std::string text = R"({"closes":[)";
  for (int i = 0; i < 10'000; ++i) {
    text += (i > 0 ? "," : "") + std::string(R"({"date":")") +
            Date::parse("1990-01-01")->plus_days(i).to_string() +
            R"(","instrument":"ALDER","close":"61.20"})";
  }
  text += "]}";
  std::chrono::duration<double, std::milli> took =
      std::chrono::hours(1);  // the best of a few: others work here too
  for (int i = 0; i < 5; ++i) {
    const auto start = std::chrono::steady_clock::now();
    const ParsedBatch batch = json(text);
    took = std::min<decltype(took)>(took, std::chrono::steady_clock::now() - start);
    CHECK(batch.rows.size() == 10'000);
  }
  MESSAGE("10,000 rows of JSON, " << text.size() << " bytes: " << took.count() << " ms");
}

}  // namespace
}  // namespace nightweigh::feed
