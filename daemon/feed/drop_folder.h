// The file drop: finished files in the folder become batches, in the order of their names.
//
// Writers rename a finished file into the folder. Names that start with '.' or end in .part or .tmp are
// ignored; a file whose size or modification time still changes between two looks waits for the next one,
// and so does one that somebody has open for writing (where the system tells: for the service's own files).
// Folders, links, pipes and devices are left alone. Events of the kernel are only hints: the folder is
// scanned at start, after every hint, on overflow and on a timer.
//
// A taken or known file moves to accepted/, a refused one to refused/ with <name>.reason.txt beside it; a
// name that is there already gets a number, nothing is overwritten. A file that is neither .csv nor .json,
// or larger than limits.bytes_max, is refused unread. A batch that the storage did not take (an error of
// kind storage or busy) stays and is tried again, later each time, up to a minute; so is a file that cannot
// be read or moved.
#pragma once

#include <utility>  // before the Asio headers, which need it for coroutines and do not include it

#include <boost/asio/io_context.hpp>
#include <chrono>
#include <filesystem>
#include <memory>

#include "daemon/domain/result.h"
#include "daemon/feed/batch.h"
#include "daemon/feed/deliver.h"

namespace nightweigh::feed {

// Everything runs on the io_context's thread; stop() and stopped() may be called from any thread. The
// io_context must outlive the folder.
class DropFolder {
 public:
  // Creates folder, accepted/ and refused/ where missing.
  static Result<std::unique_ptr<DropFolder>> open(
      boost::asio::io_context& io, std::filesystem::path folder, Limits limits, Deliver deliver,
      std::chrono::milliseconds rescan_every = std::chrono::seconds(5), Report report = {});
  virtual ~DropFolder() = default;
  virtual void start() = 0;  // spawns its coroutine on the io_context
  // Takes no further file; the coroutine ends after the batch in hand. `stopped` tells when it has.
  virtual void stop() = 0;
  virtual bool stopped() const = 0;
};

}  // namespace nightweigh::feed
