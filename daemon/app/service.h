// `nightweigh serve`: the parts put together. Threads: one network thread (this one), one writer thread
// that owns the store, one reader thread, a pool for the nights.
#pragma once

#include "daemon/domain/result.h"
#include "daemon/settings/settings.h"

namespace nightweigh::app {

// Runs until SIGTERM or SIGINT. On a failed start: what was wrong. as_json: the log goes to standard error,
// and standard output gets one line of JSON when the service is ready: where it listens.
Result<void> serve(const settings::Settings& settings, bool as_json = false);

}  // namespace nightweigh::app
