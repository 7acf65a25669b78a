// What an operator reads in the log: every change of standing, every concern that comes or goes.
#pragma once

#include <map>
#include <set>
#include <string>

#include "feed/messages.h"

namespace kedge::app {

class HealthLog {
 public:
  /// Compares a Health message with the one before about the same subject and logs the difference.
  void note(const feed::v1::Message& message);

 private:
  struct Last {
    feed::v1::Standing::Value standing = feed::v1::Standing::silent;
    std::set<feed::v1::Concern::Value> concerns;
  };
  std::map<std::string, Last> last_;
};

}  // namespace kedge::app
