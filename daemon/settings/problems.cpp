#include "daemon/settings/problems.h"

#include <algorithm>
#include <numeric>
#include <tuple>

namespace nightweigh::settings {

void Problems::add(Position at, const std::string& path, std::string problem, const std::string& value,
                   std::string remedy, ErrorKind kind) {
  std::string place = file_;
  if (at.line > 0) {
    place.append(":").append(std::to_string(at.line));
    place.append(":").append(std::to_string(at.column));
  }
  if (!path.empty()) place.append(" ").append(path);
  found_.push_back({at, {kind, std::move(place), std::move(problem), shown(value), std::move(remedy)}});
}

void Problems::add_elsewhere(Position at, Error error) {
  found_.push_back({at, std::move(error)});
}

Errors Problems::in_file_order(std::size_t most) const {
  std::vector<Found> sorted = found_;
  std::stable_sort(sorted.begin(), sorted.end(), [](const Found& a, const Found& b) {
    return std::tie(a.at.line, a.at.column) < std::tie(b.at.line, b.at.column);
  });
  Errors errors;
  for (Found& found : sorted) {
    if (errors.size() == most) {
      errors.push_back({ErrorKind::limit, file_, "has more problems than are listed",
                        std::to_string(sorted.size()), "mend the ones above first"});
      break;
    }
    errors.push_back(std::move(found.error));
  }
  return errors;
}

namespace {

// Levenshtein's distance (V. I. Levenshtein, Soviet Physics Doklady 10, 1966) by rows.
std::size_t edit_distance(const std::string& a, const std::string& b) {
  std::vector<std::size_t> row(b.size() + 1);
  std::iota(row.begin(), row.end(), std::size_t{0});
  for (std::size_t i = 0; i < a.size(); ++i) {
    std::size_t diagonal = row[0];
    row[0] = i + 1;
    for (std::size_t j = 0; j < b.size(); ++j) {
      const std::size_t replaced = diagonal + (a[i] == b[j] ? 0 : 1);
      diagonal = row[j + 1];
      row[j + 1] = std::min({replaced, row[j] + 1, row[j + 1] + 1});
    }
  }
  return row[b.size()];
}

}  // namespace

std::string nearest_word(const std::string& word, const std::vector<std::string>& known) {
  if (word.size() > 64) return {};
  std::string best;
  std::size_t best_distance = 0;
  for (const std::string& candidate : known) {
    const std::size_t distance = edit_distance(word, candidate);
    // A third of the letters may differ: enough for a slip, too little for another word.
    if (distance * 3 > std::max(word.size(), candidate.size())) continue;
    if (best.empty() || distance < best_distance) {
      best = candidate;
      best_distance = distance;
    }
  }
  return best;
}

}  // namespace nightweigh::settings
