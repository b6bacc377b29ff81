#include "daemon/runner/answers.h"

#include <charconv>
#include <nlohmann/json.hpp>
#include <optional>
#include <variant>

#include "daemon/http/entity_tag.h"
#include "daemon/http/router.h"
#include "daemon/runner/night_answers.h"
#include "daemon/runner/on_pool.h"

namespace nightweigh::runner {

using boost::asio::awaitable;
using nlohmann::ordered_json;

// The thread that reads past nights, with a connection that is opened when it is first needed.
struct Answers::Reader {
  explicit Reader(std::filesystem::path file) : database(std::move(file)) {}
  ~Reader() { pool.join(); }

  // Runs on the pool's thread.
  Result<store::Store*> open() {
    if (!connection) {
      Result<std::unique_ptr<store::Store>> opened = store::Store::open(database, store::Store::Mode::read);
      if (!opened) return failure(opened.error());
      connection = std::move(*opened);
    }
    return connection.get();
  }

  // Runs `read` (a function of Store& giving a Response) there and brings its answer back.
  template <class Read>
  awaitable<http::Response> run(Read read) {
    auto work = [this, read = std::move(read)]() -> http::Response {
      Result<store::Store*> store = open();
      if (!store) return http::problem(503, store.error());
      return read(**store);
    };
    awaitable<http::Response> response = on_pool(pool, std::move(work));
    co_return co_await std::move(response);
  }

  std::filesystem::path database;
  std::unique_ptr<store::Store> connection;
  boost::asio::thread_pool pool{1};
};

Answers::Answers(std::filesystem::path database, const platform::Clock& clock)
    : clock_(clock), reader_(std::make_unique<Reader>(std::move(database))) {}
Answers::~Answers() = default;

void Answers::publish(BookViewPointer view) {
  const std::string name = view->settings->name;
  views_[name] = std::move(view);
}

BookViewPointer Answers::find(const std::string& book) const {
  const auto found = views_.find(book);
  return found == views_.end() ? nullptr : found->second;
}

// A trading day has passed without its night: closes are due.
bool Answers::is_overdue(const BookView& view) const {
  return view.next_night && *view.next_night < platform::date_in_zone(clock_.now(), view.settings->time_zone);
}

// The last night is not the latest that there should be: closes wait, storage failed, or closes are due.
bool Answers::is_stale(const BookView& view) const {
  return !view.waiting.empty() || !view.trouble.empty() || !view.last_night || is_overdue(view);
}

// What wants a person's attention, in words.
std::vector<std::string> Answers::attention(const BookView& view) const {
  std::vector<std::string> out = view.waiting;
  if (!view.trouble.empty()) out.push_back(view.trouble);
  if (view.waiting.empty() && is_overdue(view)) {
    out.push_back("the closes of " + view.next_night->to_string() + " are due");
  }
  return out;
}

namespace {

http::Response json_response(const ordered_json& body) {
  return {200, "application/json", {}, body.dump()};
}

http::Response no_book(const std::string& name) {
  return http::problem(404, "", "there is no book \"" + name + "\"; /v1/books lists them");
}

// The members of `from` that have these names.
void copy(const ordered_json& from, ordered_json& to, std::initializer_list<const char*> names) {
  for (const char* name : names) to[name] = from.at(name);
}

std::optional<Date> date_parameter(const http::Request& request, const char* name, std::string& problem) {
  const auto found = request.query.find(name);
  if (found == request.query.end()) return std::nullopt;
  const std::optional<Date> date = Date::parse(found->second);
  if (!date) problem = std::string(name) + "=" + found->second + " is no date; write YYYY-MM-DD";
  return date;
}

// The log's query parameters, or what is wrong with them.
std::variant<store::LogFilter, std::string> log_filter(const http::Request& request) {
  for (const auto& [name, value] : request.query) {
    if (name != "from" && name != "to" && name != "verdict" && name != "limit" && name != "cursor") {
      return "there is no parameter \"" + name + "\"; use from, to, verdict, limit, cursor";
    }
  }
  store::LogFilter filter;
  std::string problem;
  filter.from = date_parameter(request, "from", problem);
  filter.to = date_parameter(request, "to", problem);
  filter.before = date_parameter(request, "cursor", problem);
  if (const auto verdict = request.query.find("verdict"); verdict != request.query.end()) {
    filter.verdict = verdict->second;
    if (filter.verdict != "move" && filter.verdict != "stay" && filter.verdict != "withheld") {
      problem = "verdict=" + filter.verdict + " is none; use move, stay or withheld";
    }
  }
  if (const auto limit = request.query.find("limit"); limit != request.query.end()) {
    const char* end = limit->second.data() + limit->second.size();
    const auto [stopped, error] = std::from_chars(limit->second.data(), end, filter.limit);
    if (error != std::errc() || stopped != end || filter.limit < 1 || filter.limit > 1000) {
      problem = "limit=" + limit->second + " is not a whole number from 1 to 1000";
    }
  }
  if (!problem.empty()) return problem;
  return filter;
}

std::string next_link(const http::Request& request, const std::string& cursor) {
  std::string query;
  for (const auto& [name, value] : request.query) {
    if (name != "cursor")
      query.append(name).append("=").append(value).append("&");  // checked: nothing to encode
  }
  return "<" + request.path + "?" + query + "cursor=" + cursor + ">; rel=\"next\"";
}

// Every answer of version 1 carries an entity tag, so that a client can ask whether it still has the latest.
awaitable<http::Response> tagged(std::shared_ptr<const http::Handler> routes, const http::Request& request) {
  awaitable<http::Response> answered = (*routes)(request);
  http::Response response = co_await std::move(answered);
  const bool version_1 = !request.segments.empty() && request.segments.front() == "v1";
  co_return version_1 ? http::with_entity_tag(request, std::move(response)) : std::move(response);
}

}  // namespace

http::Response Answers::books() const {
  ordered_json list = ordered_json::array();
  for (const auto& [name, view] : views_) {
    ordered_json entry{{"book", name}, {"currency", view->settings->currency}, {"nights", view->nights}};
    entry["date"] = view->last_night ? ordered_json(view->last_night->to_string()) : ordered_json();
    entry["stale"] = is_stale(*view);
    entry["attention"] = attention(*view).size();
    entry["href"] = "/v1/books/" + name;
    list.push_back(std::move(entry));
  }
  return json_response({{"books", std::move(list)}});
}

http::Response Answers::book(const BookView& view) const {
  const BookSettings& settings = *view.settings;
  ordered_json body{{"book", settings.name}, {"currency", settings.currency}};
  ordered_json instruments = ordered_json::array();
  for (const Instrument& instrument : settings.instruments) instruments.push_back(instrument.id);
  body["instruments"] = std::move(instruments);
  body["rule"] = settings.strategy.rule;
  body["nights"] = view.nights;
  body["date"] = nullptr;
  if (!view.night_bytes.empty()) {
    const ordered_json night = ordered_json::parse(view.night_bytes);
    copy(night, body,
         {"date", "verdict", "reason", "account", "wealth_net", "wealth_frictionless", "strategy"});
  }
  body["next_night"] = view.next_night ? ordered_json(view.next_night->to_string()) : ordered_json();
  body["stale"] = is_stale(view);
  body["attention"] = attention(view);
  body["journal"] = {{"sequence", view.head_sequence}, {"head", view.head_hash}};
  body["settings_sha256"] = settings.digest;
  body["target"] = "/v1/books/" + settings.name + "/target";
  body["log"] = "/v1/books/" + settings.name + "/log";
  return json_response(body);
}

http::Response Answers::target(const BookView& view) const {
  if (view.night_bytes.empty()) {
    return http::problem(404, "",
                         "book " + view.settings->name +
                             " has had no night yet; its first is the first trading day "
                             "from " +
                             view.settings->start.date.to_string() + " on, once every close of it is here");
  }
  const ordered_json night = ordered_json::parse(view.night_bytes);
  ordered_json body;
  copy(night, body, {"book", "date", "verdict"});
  body["stale"] = is_stale(view);
  body["attention"] = attention(view);
  copy(night, body, {"emitted", "wanted", "numerical_error"});
  body["held"] = night.at("held_after");
  copy(night, body,
       {"moves_to", "cost_bp", "growth_saved_bp_year", "payback_days", "horizon_days", "reason", "sheet"});
  body["night"] = "/v1/books/" + view.settings->name + "/nights/" + night.at("date").get<std::string>();
  body["hash"] = view.head_hash;
  return json_response(body);
}

http::Handler Answers::handler() {
  using http::PathValues;
  using http::Request;
  http::Router router;
  router.get("/healthz", [](const Request&, const PathValues&) -> awaitable<http::Response> {
    co_return json_response({{"status", "ok"}});
  });
  router.get("/readyz", [this](const Request&, const PathValues&) -> awaitable<http::Response> {
    if (!ready_) co_return http::problem(503, "", "the service is starting or stopping");
    co_return json_response({{"status", "ready"}});
  });
  router.get("/v1/books",
             [this](const Request&, const PathValues&) -> awaitable<http::Response> { co_return books(); });
  router.get("/v1/books/{book}", [this](const Request&, const PathValues& at) -> awaitable<http::Response> {
    const BookViewPointer view = find(at.at("book"));
    co_return view ? book(*view) : no_book(at.at("book"));
  });
  router.get("/v1/books/{book}/target",
             [this](const Request&, const PathValues& at) -> awaitable<http::Response> {
               const BookViewPointer view = find(at.at("book"));
               co_return view ? target(*view) : no_book(at.at("book"));
             });
  router.get("/v1/books/{book}/log",
             [this](const Request& request, const PathValues& at) -> awaitable<http::Response> {
               const BookViewPointer view = find(at.at("book"));
               if (!view) co_return no_book(at.at("book"));
               const std::variant<store::LogFilter, std::string> filter = log_filter(request);
               if (const std::string* problem = std::get_if<std::string>(&filter))
                 co_return http::problem(400, "", *problem);
               auto read = [view, request, filter = std::get<store::LogFilter>(filter)](
                               store::Store& store) -> http::Response {
                 Result<LogPage> page = log_page(store, filter, *view);
                 if (!page) return http::problem(503, page.error());
                 http::Response response{200, "application/json", {}, std::move(page->body)};
                 if (page->next) response.headers["Link"] = next_link(request, *page->next);
                 return response;
               };
               awaitable<http::Response> response = reader_->run(std::move(read));
               co_return co_await std::move(response);
             });
  router.get("/v1/books/{book}/nights/{date}",
             [this](const Request&, const PathValues& at) -> awaitable<http::Response> {
               const BookViewPointer view = find(at.at("book"));
               if (!view) co_return no_book(at.at("book"));
               const std::optional<Date> date = Date::parse(at.at("date"));
               if (!date) co_return http::problem(400, "", at.at("date") + " is no date; write YYYY-MM-DD");
               auto read = [view, date = *date](store::Store& store) -> http::Response {
                 Result<std::optional<store::StoredNight>> night = store.night(view->settings->name, date);
                 if (!night) return http::problem(503, night.error());
                 if (!*night) {
                   return http::problem(
                       404, "", "book " + view->settings->name + " has no night of " + date.to_string());
                 }
                 Result<std::string> body = night_json(**night, *view);
                 if (!body) return http::problem(503, body.error());
                 return {200, "application/json", {}, std::move(*body)};
               };
               awaitable<http::Response> response = reader_->run(std::move(read));
               co_return co_await std::move(response);
             });
  auto routes = std::make_shared<const http::Handler>(std::move(router).handler());
  return [routes](const Request& request) { return tagged(routes, request); };
}

}  // namespace nightweigh::runner
