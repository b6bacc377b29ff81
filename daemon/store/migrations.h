// The numbered migrations of migrations/, compiled into the program.
#pragma once

#include <string>
#include <vector>

namespace nightweigh::store {

struct Migration {
  std::string name;  // "0001_first_schema.sql"; the number is its version
  std::string sql;
};

const std::vector<Migration>& compiled_migrations();

}  // namespace nightweigh::store
