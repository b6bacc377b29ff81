// Which Host and Origin headers are ours. A page of a foreign site that has its own name resolve to
// loopback (DNS rebinding) sends that name as Host; a foreign page that posts to us sends its Origin.
#pragma once

#include <cstdint>
#include <set>
#include <string>

namespace nightweigh::http {

class HostList {
 public:
  // A TCP server: its own "address:port" ("[::1]:port" for IPv6), localhost, 127.0.0.1 and [::1] with the
  // port; on port 80 also without it, as clients leave it out there.
  static HostList for_tcp(const std::string& address, std::uint16_t port);
  // A Unix-domain socket has no name of its own: "localhost", or the empty Host that RFC 9112 (3.2) asks for
  // where the target has no authority.
  static HostList for_unix_socket();

  // Exact, but for the case of letters (host names have none).
  bool has_host(const std::string& host) const;
  // "http://" and a listed, non-empty host.
  bool has_origin(const std::string& origin) const;

 private:
  std::set<std::string> hosts_;
};

}  // namespace nightweigh::http
