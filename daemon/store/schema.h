// Which schema a database has, and how it gets to the newest one.
#pragma once

#include <SQLiteCpp/Database.h>

#include <filesystem>
#include <vector>

#include "daemon/domain/result.h"
#include "daemon/store/migrations.h"

namespace nightweigh::store {

// Stands in the file's header (PRAGMA application_id, and file(1) can see it): "NWGH".
inline constexpr int application_id = 0x4e574748;

// The number of the newest migration. The names must be 0001_..., 0002_..., without a gap (a bug of ours
// otherwise: std::logic_error).
int newest_version(const std::vector<Migration>& migrations);

// The version of an open database (PRAGMA user_version). Refuses
//   - a database that another program made (application_id),
//   - one that is newer than the newest migration,
//   - one whose applied migrations had another text than ours (checksums in schema_migrations).
// Reads only.
Result<int> version_of(SQLite::Database& database, const std::filesystem::path& file,
                       const std::vector<Migration>& migrations);

// Applies the migrations after `version`, each in one transaction together with its row in
// schema_migrations and user_version. A migration that fails leaves the database at the one before it.
Result<void> migrate(SQLite::Database& database, const std::filesystem::path& file, int version,
                     const std::vector<Migration>& migrations);

// A whole, checked copy of an open database at `target` (replaced if it exists), by VACUUM INTO a
// temporary name in target's folder; target is only ever a complete copy.
Result<void> copy_database(SQLite::Database& database, const std::filesystem::path& file,
                           const std::filesystem::path& target);

// The file's length and PRAGMA quick_check; the CHECK constraints are left out, as they cost seconds on
// decades of closes and say nothing about a damaged file. ErrorKind::corrupted if anything is wrong.
Result<void> check_damage(SQLite::Database& database, const std::filesystem::path& file);

}  // namespace nightweigh::store
