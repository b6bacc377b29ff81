// The line that the feed command sends, and the acknowledgement that it gets.
#include "daemon/feed/batch_line.h"

#include <nlohmann/json.hpp>
#include <string>

#include "daemon/feed/acknowledgement.h"
#include "expect.h"

namespace nightweigh::feed {
namespace {

const Limits limits;

TEST_CASE("a CSV file as one line: the texts of the file, empty fields left out") {
  const std::string text =
      "\xEF\xBB\xBF"
      "close,instrument,date,dividend,split\r\n61.20,ALDER,2026-03-02,,2\r\n\"7.00\",BRINE,2026-03-02,0,"
      "\r\n\r\n";
  const BatchLine line = csv_to_line(text, limits);
  REQUIRE(line.ok());
  CHECK(line.rows == 2);
  CHECK(line.line == R"({"closes":[{"close":"61.20","instrument":"ALDER","date":"2026-03-02","split":"2"},)"
                     R"({"close":"7.00","instrument":"BRINE","date":"2026-03-02","dividend":"0"}]})");
  const ParsedBatch there = parse_json(line.line, limits), here = parse_csv(text, limits);
  REQUIRE(there.ok());
  REQUIRE(there.rows.size() == here.rows.size());
  for (std::size_t i = 0; i < here.rows.size(); ++i) CHECK(there.rows[i].close == here.rows[i].close);
}

TEST_CASE("mistakes of the file are told before anything is sent") {
  const BatchLine line = csv_to_line("date,instrument,close\n2026-03-02,ALDER,\"61,20\"\n", limits);
  REQUIRE(line.errors.size() == 1);
  CHECK(line.line.empty());
  CHECK(line.errors[0].message() ==
        "row 1, column close: has a comma: \"61,20\". Write a decimal point and no digit grouping, as in "
        "61.20 or "
        "1234.50");
  Limits small;
  small.line_bytes_max = 20;
  const BatchLine longer = csv_to_line("date,instrument,close\n2026-03-02,ALDER,61\n", small);
  REQUIRE(longer.errors.size() == 1);
  CHECK(longer.errors[0].kind == ErrorKind::limit);
  CHECK(longer.line.empty());
}

TEST_CASE("a JSON file as one line") {
  const BatchLine line = json_to_line(
      "{\n  \"closes\": [\r\n {\"date\":\"2026-03-02\",\"instrument\":\"ALDER\",\"close\":61.20}\n]\n}\n",
      limits);
  REQUIRE(line.ok());
  CHECK(line.line.find_first_of("\r\n") == std::string::npos);
  CHECK(contains(line.line, "\"close\":61.20}"));
  CHECK(parse_json(line.line, limits).ok());
  CHECK_FALSE(json_to_line("{\"closes\":[\n", limits).ok());
}

TEST_CASE("the acknowledgement has the contract's shape") {
  Acknowledgement taken;
  taken.status = Acknowledgement::Status::taken;
  taken.digest = "ab12";
  taken.rows = 3;
  taken.books.push_back({"harbour", false, {*Date::parse("2026-03-02"), *Date::parse("2026-03-03")}, {}});
  taken.books.push_back({"quay", true, {}, {"BRINE has no close for 2026-03-02"}});
  CHECK(
      taken.to_json() ==
      R"({"status":"taken","digest":"ab12","rows":3,"books":[)"
      R"({"book":"harbour","result":"night","dates":["2026-03-02","2026-03-03"],"reasons":[]},)"
      R"({"book":"quay","result":"waiting","dates":[],"reasons":["BRINE has no close for 2026-03-02"]}],"errors":[]})");

  const Acknowledgement refused =
      refusal("cd34", {{ErrorKind::conflict, 3, "close", "12\n\xFF", "differs", "Send a higher revision"}});
  const std::string text = refused.to_json();
  CHECK(text.find('\n') == std::string::npos);
  const auto parsed = nlohmann::json::parse(text);
  CHECK(parsed["status"] == "refused");
  CHECK(parsed["rows"] == 0);
  CHECK(parsed["books"].empty());
  CHECK(parsed["errors"][0]["row"] == 3);
  CHECK(parsed["errors"][0]["column"] == "close");
  CHECK(parsed["errors"][0]["problem"] == "differs");
  CHECK(parsed["errors"][0]["remedy"] == "Send a higher revision");
  CHECK(parsed["errors"][0]["kind"] == "conflict");
}

}  // namespace
}  // namespace nightweigh::feed
