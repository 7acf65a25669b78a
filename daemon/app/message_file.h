// The canonical stream as a file of JSON lines.
#pragma once

#include <cstdio>
#include <memory>
#include <string>

#include "core/result.h"
#include "feed/encoding.h"
#include "feed/messages.h"

namespace kedge::app {

class MessageFile : public feed::MessageSink {
 public:
  /// "-" is the standard output.
  Status open(const std::string& path);
  void message(const feed::v1::Message& message) override;
  /// The first failure to write, if any; also closes.
  Status close();

 private:
  struct Closer {
    void operator()(std::FILE* file) const {
      if (file != stdout) std::fclose(file);
    }
  };
  std::string path_;
  std::unique_ptr<std::FILE, Closer> file_;
  int failure_ = 0;
};

}  // namespace kedge::app
