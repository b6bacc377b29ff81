// What the service answers to a batch, whichever way it came in.
#pragma once

#include <string>
#include <vector>

#include "daemon/domain/date.h"
#include "daemon/feed/batch.h"

namespace nightweigh::feed {

struct BookAnswer {
  std::string book;
  bool waiting = false;              // "night" or "waiting"
  std::vector<Date> dates;           // nights that were processed now, ascending
  std::vector<std::string> reasons;  // why it waits (also after processed nights: for the next date)
};

struct Acknowledgement {
  enum class Status { taken, known, refused } status = Status::refused;
  std::string digest;
  std::size_t rows = 0;  // rows newly stored
  std::vector<BookAnswer> books;
  std::vector<RowError> errors;

  // One line of JSON without a newline, as in the contract; each error also carries its "kind".
  std::string to_json() const;
};

// "taken", "known" or "refused".
const char* name_of(Acknowledgement::Status status);

// A refused batch: nothing of it was stored.
Acknowledgement refusal(std::string digest, std::vector<RowError> errors);

}  // namespace nightweigh::feed
