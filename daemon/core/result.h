// A value, or the sentence that says why there is none.
//
// Anything that came from outside (packet, file, configuration, client) fails through a Result;
// assertions are for our own bugs. The text holds numbers and units and, where it helps, the remedy.
#pragma once

#include <optional>
#include <string>
#include <utility>
#include <variant>

namespace kedge {

struct Error {
  std::string text;
};

template <class T>
class [[nodiscard]] Result {
 public:
  Result(T value) : held_(std::in_place_index<0>, std::move(value)) {}      // NOLINT(google-explicit-constructor)
  Result(Error error) : held_(std::in_place_index<1>, std::move(error)) {}  // NOLINT(google-explicit-constructor)

  [[nodiscard]] bool ok() const { return held_.index() == 0; }
  explicit operator bool() const { return ok(); }

  /// Precondition of the value accessors: ok().
  T& operator*() & { return std::get<0>(held_); }
  const T& operator*() const& { return std::get<0>(held_); }
  T&& operator*() && { return std::get<0>(std::move(held_)); }
  T* operator->() { return &std::get<0>(held_); }
  const T* operator->() const { return &std::get<0>(held_); }

  /// Precondition: !ok().
  [[nodiscard]] const std::string& error() const { return std::get<1>(held_).text; }

 private:
  std::variant<T, Error> held_;
};

/// Success without a value, or why not.
class [[nodiscard]] Status {
 public:
  Status() = default;
  Status(Error error) : error_(std::move(error)) {}  // NOLINT(google-explicit-constructor)

  [[nodiscard]] bool ok() const { return !error_.has_value(); }
  explicit operator bool() const { return ok(); }
  /// Precondition: !ok().
  [[nodiscard]] const std::string& error() const { return error_->text; }

 private:
  std::optional<Error> error_;
};

}  // namespace kedge
