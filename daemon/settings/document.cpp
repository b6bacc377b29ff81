#include "daemon/settings/document.h"

#include <yaml-cpp/emitterstyle.h>
#include <yaml-cpp/eventhandler.h>
#include <yaml-cpp/exceptions.h>
#include <yaml-cpp/mark.h>
#include <yaml-cpp/parser.h>

#include <algorithm>
#include <fstream>
#include <sstream>
#include <unordered_set>

#include "daemon/domain/utf8.h"

namespace nightweigh::settings {

namespace {

// Thrown through the parser, which is the only way to stop it, and caught in read_document.
struct Stop {};

bool is_control(unsigned char byte) {
  return (byte < 0x20 && byte != '\t' && byte != '\n' && byte != '\r') || byte == 0x7F;
}

Position position_of(const YAML::Mark& mark) {
  if (mark.is_null()) return {};
  return {mark.line + 1, mark.column + 1};
}

// Builds the tree from the parser's events, and stops the parser at the depth limit: the parser calls
// itself once a level, and the tree's readers do too.
class Builder final : public YAML::EventHandler {
 public:
  explicit Builder(Problems& problems) : problems_(problems) {}

  Node take_root() { return std::move(root_); }

  void OnDocumentStart(const YAML::Mark& /*mark*/) override {}
  void OnDocumentEnd() override {}

  void OnNull(const YAML::Mark& mark, YAML::anchor_t /*anchor*/) override {
    Node node;
    node.at = position_of(mark);
    if (!stack_.empty() && stack_.back().key) node.at = stack_.back().key_at;
    add(std::move(node));
  }

  void OnAlias(const YAML::Mark& mark, YAML::anchor_t /*anchor*/) override {
    problems_.add(position_of(mark), path(), "is an alias, which the settings do not take", "",
                  "write the value out");
    add(broken(mark));
  }

  void OnAnchor(const YAML::Mark& mark, const std::string& name) override {
    problems_.add(position_of(mark), path(), "has an anchor, which the settings do not take",
                  std::string("&").append(name), "remove it");
  }

  void OnScalar(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t /*anchor*/,
                const std::string& value) override {
    check_tag(mark, tag);
    const bool clean = std::none_of(value.begin(), value.end(),
                                    [](char c) { return is_control(static_cast<unsigned char>(c)); });
    if (!clean) {
      problems_.add(position_of(mark), path(), "holds a control character", value, "remove it");
      return add(broken(mark));
    }
    Node node;
    node.kind = Node::Kind::scalar;
    node.text = value;
    node.quoted = tag != "?";
    node.at = position_of(mark);
    add(std::move(node));
  }

  void OnSequenceStart(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t /*anchor*/,
                       YAML::EmitterStyle::value /*style*/) override {
    open(mark, tag, Node::Kind::list);
  }
  void OnSequenceEnd() override { close(); }

  void OnMapStart(const YAML::Mark& mark, const std::string& tag, YAML::anchor_t /*anchor*/,
                  YAML::EmitterStyle::value /*style*/) override {
    open(mark, tag, Node::Kind::map);
  }
  void OnMapEnd() override { close(); }

 private:
  struct Frame {
    Node node;
    std::optional<std::string> key;  // of the value that comes next
    Position key_at;
    bool drop_value = false;  // the key was refused: its value goes nowhere
    std::unordered_set<std::string> keys;
  };

  static Node broken(const YAML::Mark& mark) {
    Node node;
    node.kind = Node::Kind::broken;
    node.at = position_of(mark);
    return node;
  }

  // The full name of what comes next.
  std::string path() const {
    std::string text;
    for (const Frame& frame : stack_) {
      if (frame.node.kind == Node::Kind::list) {
        text = indexed(text, frame.node.items.size());
      } else if (frame.key) {
        text = joined(text, *frame.key);
      }
    }
    return text;
  }

  void check_tag(const YAML::Mark& mark, const std::string& tag) {
    if (tag.empty() || tag == "?" || tag == "!") return;
    problems_.add(position_of(mark), path(), "has a tag, which the settings do not take", tag, "remove it");
  }

  void open(const YAML::Mark& mark, const std::string& tag, Node::Kind kind) {
    check_tag(mark, tag);
    if (stack_.size() >= depth_max) {
      problems_.add(position_of(mark), "", "is nested too deeply", "",
                    "the settings need fewer than " + std::to_string(depth_max) + " levels");
      throw Stop();
    }
    Frame frame;
    frame.node.kind = kind;
    frame.node.at = position_of(mark);
    stack_.push_back(std::move(frame));
  }

  void close() {
    Node node = std::move(stack_.back().node);
    stack_.pop_back();
    add(std::move(node));
  }

  void add(Node node) {
    if (stack_.empty()) {
      root_ = std::move(node);
      return;
    }
    Frame& frame = stack_.back();
    if (frame.node.kind == Node::Kind::list) {
      frame.node.items.push_back(std::move(node));
    } else if (frame.key) {
      if (!frame.drop_value) frame.node.entries.push_back({*frame.key, frame.key_at, std::move(node)});
      frame.key.reset();
    } else {
      take_key(frame, node);
    }
  }

  void take_key(Frame& frame, const Node& node) {
    const std::string map_path = path();
    frame.key = node.text;
    frame.key_at = node.at;
    frame.drop_value = true;
    if (node.kind == Node::Kind::broken) return;
    if (node.kind != Node::Kind::scalar || node.text.empty()) {
      problems_.add(node.at, map_path, "has a key that is no plain text", "", "write the key as a word");
    } else if (node.text == "<<" && !node.quoted) {
      problems_.add(node.at, map_path, "has a merge key, which the settings do not take", node.text,
                    "write the keys out");
    } else if (!frame.keys.insert(node.text).second) {
      problems_.add(node.at, joined(map_path, node.text), "stands twice", node.text, "keep one of them");
    } else {
      frame.drop_value = false;
    }
  }

  Problems& problems_;
  Node root_;
  std::vector<Frame> stack_;
};

// Takes any second document as a problem.
class NoMore final : public YAML::EventHandler {
 public:
  explicit NoMore(Problems& problems) : problems_(problems) {}
  void OnDocumentStart(const YAML::Mark& mark) override {
    problems_.add(position_of(mark), "", "begins a second document", "", "keep one document a file");
    throw Stop();
  }
  void OnDocumentEnd() override {}
  void OnNull(const YAML::Mark& /*mark*/, YAML::anchor_t /*anchor*/) override {}
  void OnAlias(const YAML::Mark& /*mark*/, YAML::anchor_t /*anchor*/) override {}
  void OnScalar(const YAML::Mark& /*mark*/, const std::string& /*tag*/, YAML::anchor_t /*anchor*/,
                const std::string& /*value*/) override {}
  void OnSequenceStart(const YAML::Mark& /*mark*/, const std::string& /*tag*/, YAML::anchor_t /*anchor*/,
                       YAML::EmitterStyle::value /*style*/) override {}
  void OnSequenceEnd() override {}
  void OnMapStart(const YAML::Mark& /*mark*/, const std::string& /*tag*/, YAML::anchor_t /*anchor*/,
                  YAML::EmitterStyle::value /*style*/) override {}
  void OnMapEnd() override {}

 private:
  Problems& problems_;
};

Position position_of_byte(const std::string& text, std::size_t at) {
  const auto begin = text.begin();
  const auto end = begin + static_cast<std::ptrdiff_t>(at);
  const auto lines = std::count(begin, end, '\n');
  const std::size_t newline = at == 0 ? std::string::npos : text.rfind('\n', at - 1);
  const std::size_t line_start = newline == std::string::npos ? 0 : newline + 1;
  return {static_cast<int>(lines) + 1, static_cast<int>(at - line_start) + 1};
}

// The parser would take other encodings, and would end the document at a byte 0x04.
bool is_clean_text(const std::string& text, Problems& problems) {
  if (const auto bad = first_invalid_utf8(text)) {
    problems.add(position_of_byte(text, *bad), "", "is not UTF-8 text", text.substr(*bad, 1),
                 "save the file as UTF-8");
    return false;
  }
  const auto control = std::find_if(text.begin(), text.end(),
                                    [](char c) { return is_control(static_cast<unsigned char>(c)); });
  if (control != text.end()) {
    problems.add(position_of_byte(text, static_cast<std::size_t>(control - text.begin())), "",
                 "holds a control character", std::string(1, *control), "remove it");
    return false;
  }
  return true;
}

}  // namespace

std::string indexed(const std::string& path, std::size_t i) {
  std::string text = path;
  return text.append("[").append(std::to_string(i)).append("]");
}

std::string joined(const std::string& path, const std::string& key) {
  return path.empty() ? shown(key, 60) : path + "." + shown(key, 60);
}

std::optional<Node> read_document(const std::string& text, Problems& problems) {
  if (text.size() > file_bytes_max) {
    problems.add({}, "", "is too large", std::to_string(text.size()) + " bytes",
                 "a settings file has at most " + std::to_string(file_bytes_max) + " bytes");
    return std::nullopt;
  }
  if (!is_clean_text(text, problems)) return std::nullopt;
  try {
    std::istringstream stream(text);
    YAML::Parser parser(stream);
    Builder builder(problems);
    if (!parser.HandleNextDocument(builder)) {
      problems.add({}, "", "holds no settings", "", "write at least the keys instruments and books");
      return std::nullopt;
    }
    NoMore no_more(problems);
    parser.HandleNextDocument(no_more);
    return builder.take_root();
  } catch (const Stop&) {
    return std::nullopt;
  } catch (const YAML::Exception& error) {
    problems.add(position_of(error.mark), "", "is not well-formed YAML (" + error.msg + ")", "",
                 "mend the indentation, brackets or quotes there");
    return std::nullopt;
  }
}

Result<std::string> read_small_file(const std::filesystem::path& file) {
  const auto refused = [&](const std::string& problem, const std::string& value, const std::string& remedy) {
    return failure({ErrorKind::bad_settings, file.string(), problem, value, remedy});
  };
  std::error_code code;
  const auto status = std::filesystem::status(file, code);
  if (!std::filesystem::exists(status)) return refused("is not there", "", "check the path");
  // A pipe or a device could keep the reader waiting for ever.
  if (!std::filesystem::is_regular_file(status))
    return refused("is not a regular file", "", "name a plain file");
  std::ifstream stream(file, std::ios::binary);
  if (!stream) return refused("cannot be read", "", "check its permissions");
  std::string text(file_bytes_max + 1, '\0');
  stream.read(text.data(), static_cast<std::streamsize>(text.size()));
  text.resize(static_cast<std::size_t>(stream.gcount()));
  if (stream.bad()) return refused("cannot be read", "", "check the disk");
  if (text.size() > file_bytes_max) {
    return refused("is too large", "more than " + std::to_string(file_bytes_max) + " bytes",
                   "split it or remove what is not needed");
  }
  return text;
}

}  // namespace nightweigh::settings
