// Path patterns to handlers: "/v1/books/{book}/target". A path that no pattern fits is 404; one that fits
// with another method only is 405 with an Allow header.
#pragma once

#include <functional>
#include <map>
#include <memory>
#include <string>
#include <vector>

#include "daemon/http/server.h"

namespace nightweigh::http {

// What stood at the {names} of the pattern.
using PathValues = std::map<std::string, std::string>;

class Router {
 public:
  using Route = std::function<boost::asio::awaitable<Response>(const Request&, const PathValues&)>;

  // A segment is a fixed word or a {name}, which takes any non-empty segment. Of several patterns that fit,
  // the one added first answers.
  void add(const std::string& method, const std::string& pattern, Route route);
  void get(const std::string& pattern, Route route) { add("GET", pattern, std::move(route)); }

  // A handler that owns the routes.
  Handler handler() &&;

 private:
  struct Entry {
    std::string method;
    std::vector<std::string> segments;
    Route route;
  };
  static boost::asio::awaitable<Response> answer(std::shared_ptr<const std::vector<Entry>> entries,
                                                 const Request& request);

  std::vector<Entry> entries_;
};

}  // namespace nightweigh::http
