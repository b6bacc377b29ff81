// A file descriptor that closes itself.
#pragma once

#include <unistd.h>

#include <cerrno>
#include <utility>

namespace nightweigh::platform {

class Descriptor {
 public:
  Descriptor() = default;
  explicit Descriptor(int number) : number_(number) {}  // what open(2) gave, also -1
  Descriptor(Descriptor&& other) noexcept : number_(std::exchange(other.number_, -1)) {}
  Descriptor& operator=(Descriptor&& other) noexcept {
    if (this != &other) {
      close();
      number_ = std::exchange(other.number_, -1);
    }
    return *this;
  }
  ~Descriptor() {
    const int before = errno;  // the reason of a failure must outlive the clean-up
    close();
    errno = before;
  }

  explicit operator bool() const { return number_ >= 0; }
  int number() const { return number_; }

  // 0 or an errno. Late write errors of some file systems show only here.
  int close() {
    if (number_ < 0) return 0;
    return ::close(std::exchange(number_, -1)) == 0 ? 0 : errno;
  }

 private:
  int number_ = -1;
};

}  // namespace nightweigh::platform
