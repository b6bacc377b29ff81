#include "daemon/http/router.h"

#include <algorithm>
#include <optional>
#include <set>

namespace nightweigh::http {

namespace {

bool is_name(const std::string& segment) {
  return segment.size() > 2 && segment.front() == '{' && segment.back() == '}';
}

std::optional<PathValues> fit(const std::vector<std::string>& pattern, const std::vector<std::string>& path) {
  if (pattern.size() != path.size()) return std::nullopt;
  PathValues values;
  for (std::size_t i = 0; i < pattern.size(); ++i) {
    if (is_name(pattern[i])) {
      if (path[i].empty()) return std::nullopt;
      values[pattern[i].substr(1, pattern[i].size() - 2)] = path[i];
    } else if (pattern[i] != path[i]) {
      return std::nullopt;
    }
  }
  return values;
}

}  // namespace

void Router::add(const std::string& method, const std::string& pattern, Route route) {
  Entry entry{method, {}, std::move(route)};
  for (std::size_t at = 1; at < pattern.size();) {
    const std::size_t slash = std::min(pattern.find('/', at), pattern.size());
    entry.segments.push_back(pattern.substr(at, slash - at));
    at = slash + 1;
  }
  entries_.push_back(std::move(entry));
}

Handler Router::handler() && {
  // Shared, because a Handler is copied and its coroutines look at the routes while they run.
  const auto entries = std::make_shared<const std::vector<Entry>>(std::move(entries_));
  return [entries](const Request& request) { return answer(entries, request); };
}

boost::asio::awaitable<Response> Router::answer(std::shared_ptr<const std::vector<Entry>> entries,
                                                const Request& request) {
  std::set<std::string> allowed;
  for (const Entry& entry : *entries) {
    const std::optional<PathValues> values = fit(entry.segments, request.segments);
    if (!values) continue;
    if (entry.method == request.method) co_return co_await entry.route(request, *values);
    allowed.insert(entry.method);
    if (entry.method == "GET") allowed.insert("HEAD");
  }
  if (allowed.empty()) co_return problem(404, "", "there is nothing at " + shown(request.path, 200));
  std::string list;
  for (const std::string& method : allowed) list += (list.empty() ? "" : ", ") + method;
  Response response = problem(405, "", request.path + " answers " + list + " only");
  response.headers["Allow"] = list;
  co_return response;
}

}  // namespace nightweigh::http
