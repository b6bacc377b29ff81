// The file drop: finished files in the folder become batches, in the order of their names.
//
// Writers rename a finished file into the folder. Names that start with '.' or end in .part or .tmp are
// ignored; a file whose size or modification time still changes between two looks waits for the next one.
// Events of the kernel are only hints: the folder is scanned at start, after every hint, on overflow and
// on a timer. A taken or known file moves to accepted/, a refused one to refused/ with
// <name>.reason.txt beside it; a name that is there already gets a number, nothing is overwritten.
#pragma once

#include <boost/asio/awaitable.hpp>
#include <boost/asio/io_context.hpp>
#include <chrono>
#include <filesystem>
#include <functional>
#include <memory>
#include <string>

#include "daemon/domain/result.h"
#include "daemon/feed/acknowledgement.h"

namespace nightweigh::feed {

// Gives bytes to the runner and waits for its answer; `source` is for people ("drop: a.csv"). `is_json`
// tells the form.
using Deliver =
    std::function<boost::asio::awaitable<Acknowledgement>(std::string bytes, bool is_json, std::string source)>;

class DropFolder {
 public:
  // Creates folder, accepted/ and refused/ where missing.
  static Result<std::unique_ptr<DropFolder>> open(boost::asio::io_context& io, std::filesystem::path folder,
                                                  Limits limits, Deliver deliver,
                                                  std::chrono::milliseconds rescan_every = std::chrono::seconds(5));
  virtual ~DropFolder() = default;
  virtual void start() = 0;  // spawns its coroutine on the io_context
  // Takes no further file; the coroutine ends after the batch in hand. `stopped` tells when it has.
  virtual void stop() = 0;
  virtual bool stopped() const = 0;
};

}  // namespace nightweigh::feed
