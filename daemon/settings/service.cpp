#include <algorithm>
#include <array>
#include <charconv>

#include "daemon/settings/sections.h"

namespace nightweigh::settings {

namespace {

// sockaddr_un has room for 107 bytes and the end mark (unix(7)).
constexpr std::size_t unix_path_bytes_max = 107;

constexpr const char* endpoint_forms = "write 127.0.0.1:PORT, [::1]:PORT or unix:PATH";

// Digits only, no leading zero, at most `high`.
std::optional<unsigned> small_number(std::string_view text, unsigned high) {
  unsigned value = 0;
  const auto [stop, code] = std::from_chars(text.data(), text.data() + text.size(), value);
  if (code != std::errc() || stop != text.data() + text.size() || value > high) return std::nullopt;
  if (text.size() > 1 && text.front() == '0') return std::nullopt;
  return value;
}

// 127.0.0.0/8 (RFC 1122, 3.2.1.3) as four decimal numbers, or ::1 (RFC 4291, 2.5.3).
bool is_loopback(std::string_view address) {
  if (address == "::1") return true;
  std::array<std::optional<unsigned>, 4> bytes{};
  for (std::size_t i = 0; i < bytes.size(); ++i) {
    const std::size_t point = address.find('.');
    if ((point == std::string_view::npos) != (i == 3)) return false;
    bytes[i] = small_number(address.substr(0, point), 255);
    if (!bytes[i]) return false;
    if (i < 3) address.remove_prefix(point + 1);
  }
  return *bytes[0] == 127;
}

std::optional<Endpoint> read_unix_socket(const Value& value, const std::filesystem::path& data_dir,
                                         Problems& problems) {
  const std::string name = value.node->text.substr(5);
  if (name.empty()) {
    refuse(problems, value, "names no socket", "write unix: and the path of the socket");
    return std::nullopt;
  }
  Endpoint endpoint;
  endpoint.kind = Endpoint::Kind::unix_socket;
  endpoint.path = (data_dir / name).lexically_normal();
  if (endpoint.path.native().size() > unix_path_bytes_max) {
    refuse(problems, value, "is too long for a socket's path",
           "with its folder it may have " + std::to_string(unix_path_bytes_max) +
               " bytes; choose a shorter one");
    return std::nullopt;
  }
  return endpoint;
}

std::optional<Endpoint> read_endpoint(const Value& value, const std::filesystem::path& data_dir,
                                      Problems& problems) {
  const auto text = read_text(value, problems, endpoint_forms);
  if (!text) return std::nullopt;
  if (text->starts_with("unix:")) return read_unix_socket(value, data_dir, problems);
  const std::size_t colon = text->rfind(':');
  std::string address = text->substr(0, colon);
  const auto port = colon == std::string::npos ? std::nullopt : small_number(text->substr(colon + 1), 65535);
  if (!port) {
    refuse(problems, value, "has no port from 0 to 65535", endpoint_forms);
    return std::nullopt;
  }
  const bool bracketed = address.size() > 2 && address.front() == '[' && address.back() == ']';
  if (bracketed) address = address.substr(1, address.size() - 2);
  if (!is_loopback(address) || bracketed != (address == "::1")) {
    refuse(problems, value,
           "is not a loopback address: the service has no encryption, and other machines must not reach it",
           endpoint_forms);
    return std::nullopt;
  }
  Endpoint endpoint;
  endpoint.kind = Endpoint::Kind::tcp;
  endpoint.address = address;
  endpoint.port = static_cast<std::uint16_t>(*port);
  return endpoint;
}

bool same_place(const Endpoint& a, const Endpoint& b) {
  if (a.kind != b.kind || a.kind == Endpoint::Kind::off) return false;
  if (a.kind == Endpoint::Kind::unix_socket) return a.path == b.path;
  return a.address == b.address && a.port == b.port && a.port != 0;
}

// Whether `folder` is `inner` or one of the folders above it. Links are followed where they exist.
bool is_at_or_above(const std::filesystem::path& folder, const std::filesystem::path& inner) {
  std::error_code ignored;
  std::filesystem::path above = std::filesystem::weakly_canonical(folder, ignored);
  if (!above.has_filename()) above = above.parent_path();  // "var/" is "var"
  const std::filesystem::path below = std::filesystem::weakly_canonical(inner, ignored);
  return std::mismatch(above.begin(), above.end(), below.begin(), below.end()).first == above.end();
}

// Files that lie in the drop folder are taken for deliveries and moved: it must hold nothing else.
void read_drop_dir(const Value& value, ServiceSettings& out, const Context& context) {
  const char* remedy = "write the folder for dropped files, or \"\" to switch it off";
  const auto text = read_text(value, context.problems, remedy);
  if (!text) return;
  out.drop_dir = text->empty() ? std::filesystem::path() : (out.data_dir / *text).lexically_normal();
  if (!out.drop_dir.empty() &&
      (is_at_or_above(out.drop_dir, out.data_dir) || is_at_or_above(out.drop_dir, context.folder))) {
    refuse(context.problems, value, "holds the service's own files, which would be taken for deliveries",
           "name a folder of its own, like drop");
  }
}

Endpoint tcp(std::uint16_t port) {
  Endpoint endpoint;
  endpoint.kind = Endpoint::Kind::tcp;
  endpoint.address = "127.0.0.1";
  endpoint.port = port;
  return endpoint;
}

}  // namespace

ServiceSettings read_service(MapReader service, const Context& context) {
  Problems& problems = context.problems;
  ServiceSettings out;
  std::string data_dir = "./var";
  if (const auto value = service.optional("data_dir")) {
    const std::string remedy = "write the folder of the database, like ./var";
    if (const auto text = read_text(*value, problems, remedy)) data_dir = *text;
    if (data_dir.empty()) refuse(problems, *value, "names no folder", remedy);
  }
  out.data_dir = (context.folder / data_dir).lexically_normal();
  // "./var/" and "./var" are the same folder.
  if (!out.data_dir.has_filename()) out.data_dir = out.data_dir.parent_path();

  out.http = tcp(8420);
  if (const auto value = service.optional("http")) {
    if (value->is_text() && value->node->text.empty()) {
      refuse(problems, *value, "cannot be switched off: every reader asks the service over it",
             endpoint_forms);
    } else if (const auto endpoint = read_endpoint(*value, out.data_dir, problems)) {
      out.http = *endpoint;
    }
  }
  out.feed_socket = tcp(8421);
  if (const auto value = service.optional("feed_socket")) {
    if (value->is_text() && value->node->text.empty()) {
      out.feed_socket = Endpoint();
    } else if (const auto endpoint = read_endpoint(*value, out.data_dir, problems)) {
      out.feed_socket = *endpoint;
      if (same_place(out.http, out.feed_socket)) {
        refuse(problems, *value, "is where http listens too", "choose another port or path");
      }
    }
  }
  out.drop_dir = out.data_dir / "drop";
  if (const auto value = service.optional("drop_dir")) read_drop_dir(*value, out, context);
  service.accept_only("outbox_dir", OffValue::word(""));
  service.accept_only("tokens_file", OffValue::word(""));
  if (const auto value = service.optional("log_level")) {
    out.log_level = read_word(*value, {"trace", "debug", "info", "warn", "error"}, problems).value_or("info");
  }
  service.finish();
  return out;
}

}  // namespace nightweigh::settings
