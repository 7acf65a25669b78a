#include "convert/columns.h"

#include <fmt/core.h>

#include <limits>

namespace kedge::convert {

namespace {
// Some 127 years: nanoseconds in 64 bits hold the difference of any two.
constexpr double time_s_max = 4e9;
}  // namespace

void Columns::fail(std::string text) {
  if (status_) status_ = Error{std::move(text)};
}

std::vector<TimeNs> Columns::times_ns() {
  std::vector<TimeNs> times;
  const std::vector<double> seconds = required("t_s");
  times.reserve(seconds.size());
  for (std::size_t row = 0; row < seconds.size(); ++row) {
    if (std::abs(seconds[row]) > time_s_max) {
      fail(fmt::format("{}: column 't_s' holds {:g} s; times must be within +-{:g} s", table_.place(row), seconds[row],
                       time_s_max));
      return {};
    }
    times.push_back(std::llround(seconds[row] * 1e9));
  }
  return times;
}

std::vector<double> Columns::required(std::string_view column) {
  if (!status_) return {};
  auto values = table_.numbers(column);
  if (!values) {
    fail(values.error());
    return {};
  }
  return *std::move(values);
}

std::vector<double> Columns::optional(std::string_view column) {
  if (!status_ || !has(column)) return {};
  auto values = table_.numbers(column, scoring::CsvTable::Empty::as_nan);
  if (!values) {
    fail(values.error());
    return {};
  }
  return *std::move(values);
}

std::vector<std::string_view> Columns::texts(std::string_view column) {
  if (!status_) return {};
  auto values = table_.texts(column);
  if (!values) {
    fail(values.error());
    return {};
  }
  return *std::move(values);
}

std::vector<std::uint32_t> Columns::numbers_32(std::string_view column) {
  if (!status_) return {};
  auto values = table_.counts(column);
  if (!values) {
    fail(values.error());
    return {};
  }
  std::vector<std::uint32_t> numbers;
  numbers.reserve(values->size());
  for (std::size_t row = 0; row < values->size(); ++row) {
    if ((*values)[row] > std::numeric_limits<std::uint32_t>::max()) {
      fail(fmt::format("{}: column '{}' holds {}; at most {} is possible", table_.place(row), column, (*values)[row],
                       std::numeric_limits<std::uint32_t>::max()));
      return {};
    }
    numbers.push_back(static_cast<std::uint32_t>((*values)[row]));
  }
  return numbers;
}

}  // namespace kedge::convert
