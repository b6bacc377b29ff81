#include "daemon/feed/batch.h"

namespace nightweigh::feed {

std::string RowError::message() const {
  std::string text;
  if (row > 0) text = "row " + std::to_string(row);
  if (!column.empty()) text += (text.empty() ? "column " : ", column ") + column;
  if (text.empty()) text = "the batch";
  text += ": " + problem;
  if (!value.empty()) text += ": \"" + value + "\"";
  if (!remedy.empty()) {
    text += ". " + remedy;
    char& first = text[text.size() - remedy.size()];
    if (first >= 'a' && first <= 'z') first = static_cast<char>(first - 'a' + 'A');
  }
  return text;
}

}  // namespace nightweigh::feed
