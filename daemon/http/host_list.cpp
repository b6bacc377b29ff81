#include "daemon/http/host_list.h"

namespace nightweigh::http {

namespace {

std::string lower(std::string text) {
  for (char& c : text)
    if (c >= 'A' && c <= 'Z') c = static_cast<char>(c - 'A' + 'a');
  return text;
}

}  // namespace

HostList HostList::for_tcp(const std::string& address, std::uint16_t port) {
  HostList list;
  const bool is_v6 = address.find(':') != std::string::npos;
  for (const std::string& host : {is_v6 ? "[" + address + "]" : address, std::string("localhost"),
                                  std::string("127.0.0.1"), std::string("[::1]")}) {
    list.hosts_.insert(lower(host) + ":" + std::to_string(port));
    if (port == 80) list.hosts_.insert(lower(host));
  }
  return list;
}

HostList HostList::for_unix_socket() {
  HostList list;
  list.hosts_ = {"", "localhost"};
  return list;
}

bool HostList::has_host(const std::string& host) const {
  return hosts_.contains(lower(host));
}

bool HostList::has_origin(const std::string& origin) const {
  constexpr std::size_t scheme_length = 7;
  const std::string text = lower(origin);
  return text.starts_with("http://") && text.size() > scheme_length &&
         hosts_.contains(text.substr(scheme_length));
}

}  // namespace nightweigh::http
