#!/usr/bin/env python3
"""Holds every #include against the link lists of CMakeLists.txt (the law of who may include whom).

Usage: include_law.py SOURCE_DIR LAW_FILE
LAW_FILE has a line a module: "folder: folder folder ...", written by CMake from the link lists.

Libraries that only some folders may see stand in LIBRARIES below; the top of design is
"the only place that includes SQLiteCpp is store, the only one that includes Beast is http".
"""
import pathlib
import re
import sys

INCLUDE = re.compile(r'^\s*#\s*include\s*([<"])([^>"]+)[>"]', re.MULTILINE)

# prefix of an include -> folders that may use it
LIBRARIES = {
    "SQLiteCpp/": ["daemon/store"],
    "sqlite3": ["daemon/store"],
    "boost/beast": ["daemon/http"],
    "boost/asio": ["daemon/feed", "daemon/http", "daemon/runner", "daemon/app"],
    "yaml-cpp/": ["daemon/settings"],
    "Eigen/": ["strategies/gate", "daemon/night"],
    "spdlog/": ["daemon/runner", "daemon/app"],
    "CLI/": ["daemon/commands", "daemon/app"],
    "openssl/": ["strategies/digest"],
    "date/": ["daemon/platform"],
    "systemd/": ["daemon/app"],
    "nlohmann/": ["daemon/settings", "daemon/night", "daemon/feed", "daemon/runner", "daemon/http",
                  "daemon/commands", "daemon/app"],
}
# Pure folders: nothing that reads a clock, a file or a thread.
PURE = ["strategies", "daemon/domain", "daemon/ledger", "daemon/night"]
IMPURE_HEADERS = {"thread", "mutex", "fstream", "filesystem", "iostream", "random", "unistd.h", "ctime", "time.h",
                  "sys/time.h", "atomic", "condition_variable"}
IMPURE_ALLOWED = {("strategies/numerics", "atomic")}  # the level that is chosen once


def main():
    source, law_file = pathlib.Path(sys.argv[1]), pathlib.Path(sys.argv[2])
    law = {}
    for line in law_file.read_text().splitlines():
        folder, _, links = line.partition(":")
        law[folder] = set(links.replace(";", " ").split())
    problems = []
    seen = 0
    for top in ("strategies", "daemon"):
        for path in sorted((source / top).rglob("*")):
            if path.suffix not in (".h", ".cpp", ".cc"):
                continue
            folder = str(path.parent.relative_to(source))
            if folder not in law:
                problems.append(f"{path.relative_to(source)}: its folder is no module of CMakeLists.txt")
                continue
            for kind, target in INCLUDE.findall(path.read_text()):
                seen += 1
                where = f"{path.relative_to(source)}: includes {target}"
                if kind == '"':
                    if not (source / target).is_file():
                        problems.append(f"{where}, which is no file; write paths from the top of the tree")
                        continue
                    owner = str(pathlib.PurePosixPath(target).parent)
                    if owner != folder and owner not in law[folder]:
                        problems.append(f"{where}, but {folder} does not link {owner}")
                    continue
                for prefix, folders in LIBRARIES.items():
                    if target.startswith(prefix) and folder not in folders:
                        problems.append(f"{where}, a library that only {', '.join(folders)} may see")
                if target in IMPURE_HEADERS and any(folder == p or folder.startswith(p + "/") for p in PURE):
                    if (folder, target) not in IMPURE_ALLOWED:
                        problems.append(f"{where}, but {folder} is pure")
    for problem in problems:
        print(problem)
    print(f"{seen} includes in {len(law)} modules: {len(problems)} against the law")
    return 1 if problems or seen == 0 else 0


if __name__ == "__main__":
    sys.exit(main())
