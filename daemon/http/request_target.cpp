#include "daemon/http/request_target.h"

#include <optional>
#include <utility>

#include "daemon/domain/utf8.h"

namespace nightweigh::http {

namespace {

int hex_value(char c) {
  if (c >= '0' && c <= '9') return c - '0';
  if (c >= 'a' && c <= 'f') return c - 'a' + 10;
  if (c >= 'A' && c <= 'F') return c - 'A' + 10;
  return -1;
}

tl::unexpected<Error> refused(std::string problem, std::string_view value, std::string remedy) {
  return failure({ErrorKind::bad_input, "request target", std::move(problem), shown(std::string(value)),
                  std::move(remedy)});
}

Result<std::string> decoded(std::string_view text, bool plus_is_space) {
  std::string out;
  out.reserve(text.size());
  for (std::size_t i = 0; i < text.size(); ++i) {
    const char c = text[i];
    if (c == '%') {
      const int high = i + 1 < text.size() ? hex_value(text[i + 1]) : -1;
      const int low = i + 2 < text.size() ? hex_value(text[i + 2]) : -1;
      if (high < 0 || low < 0)
        return refused("has a percent sign without two hexadecimal digits", text, "write % itself as %25");
      const int byte = high * 16 + low;
      if (byte < 0x20 || byte == 0x7F) return refused("escapes a control byte", text, "leave it out");
      out += static_cast<char>(byte);
      i += 2;
    } else if (c == '+' && plus_is_space) {
      out += ' ';
    } else {
      out += c;
    }
  }
  if (first_invalid_utf8(out)) return refused("is not UTF-8", text, "percent-encode UTF-8 text");
  return out;
}

std::optional<Error> read_path(std::string_view path, RequestTarget& into) {
  std::string_view rest = path.substr(1);
  for (bool is_last = rest.empty(); !is_last;) {
    const std::size_t slash = rest.find('/');
    is_last = slash == std::string_view::npos;
    Result<std::string> segment = decoded(rest.substr(0, slash), false);
    if (!segment) return segment.error();
    if (segment->empty() && !is_last)
      return refused("has an empty path segment", path, "write one slash between segments").value();
    if (*segment == "." || *segment == "..")
      return refused("has a segment of dots", path, "write the path that is meant").value();
    if (segment->find('/') != std::string::npos)
      return refused("escapes a slash", path, "no name here holds a slash").value();
    into.path += '/';
    into.path += *segment;
    into.segments.push_back(std::move(*segment));
    if (!is_last) rest.remove_prefix(slash + 1);
  }
  if (into.segments.empty()) into.path += '/';
  return std::nullopt;
}

std::optional<Error> read_query(std::string_view query, RequestTarget& into) {
  while (!query.empty()) {
    const std::size_t ampersand = query.find('&');
    const std::string_view part = query.substr(0, ampersand);
    query.remove_prefix(ampersand == std::string_view::npos ? query.size() : ampersand + 1);
    if (part.empty()) continue;
    const std::size_t equals = part.find('=');
    Result<std::string> key = decoded(part.substr(0, equals), true);
    if (!key) return key.error();
    Result<std::string> value =
        decoded(equals == std::string_view::npos ? std::string_view() : part.substr(equals + 1), true);
    if (!value) return value.error();
    if (key->empty()) return refused("has a query value without a key", part, "write key=value").value();
    if (!into.query.emplace(*key, std::move(*value)).second)
      return refused("has a query key twice", *key, "give each key once").value();
  }
  return std::nullopt;
}

}  // namespace

Result<RequestTarget> parse_request_target(std::string_view target) {
  const std::string_view whole = target;
  RequestTarget out;
  for (const char c : target)
    if (c <= 0x20 || c >= 0x7F || c == '#' || c == '\\')
      return refused("has a character that a request target cannot hold", whole, "percent-encode it");
  constexpr std::string_view scheme = "http://";
  if (target.starts_with(scheme)) {
    target.remove_prefix(scheme.size());
    const std::size_t end = target.find_first_of("/?");
    out.authority = std::string(target.substr(0, end));
    target = end == std::string_view::npos ? std::string_view("/") : target.substr(end);  // RFC 9112, 3.2.1
    if (out.authority.empty()) return refused("names no host", whole, "write a path that starts with /");
  }
  if (!target.starts_with('/'))
    return refused("does not start with a slash", whole, "write a path like /v1/books");
  const std::size_t question = target.find('?');
  if (std::optional<Error> error = read_path(target.substr(0, question), out))
    return failure(std::move(*error));
  if (question != std::string_view::npos)
    if (std::optional<Error> error = read_query(target.substr(question + 1), out))
      return failure(std::move(*error));
  return out;
}

std::string percent_encoded(std::string_view text) {
  constexpr std::string_view digits = "0123456789ABCDEF";
  std::string out;
  for (const char c : text) {
    const bool unreserved = (c >= 'A' && c <= 'Z') || (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') ||
                            c == '-' || c == '.' || c == '_' || c == '~';
    if (unreserved) {
      out += c;
    } else {
      const auto byte = static_cast<unsigned char>(c);
      out += '%';
      out += digits[byte >> 4];
      out += digits[byte & 15];
    }
  }
  return out;
}

}  // namespace nightweigh::http
