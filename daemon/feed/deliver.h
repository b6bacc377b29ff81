// How the ways in hand a batch over, and how they tell people what they could not do.
#pragma once

#include <utility>  // before the Asio headers, which need it for coroutines and do not include it

#include <boost/asio/awaitable.hpp>
#include <functional>
#include <string>

#include "daemon/feed/acknowledgement.h"

namespace nightweigh::feed {

// Gives bytes to the runner and waits for its answer; `source` is for people ("drop: a.csv"). `is_json`
// tells the form.
using Deliver = std::function<boost::asio::awaitable<Acknowledgement>(std::string bytes, bool is_json,
                                                                      std::string source)>;

// Takes one line for the log; may be empty.
using Report = std::function<void(const std::string& line)>;

}  // namespace nightweigh::feed
