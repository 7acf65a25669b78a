// Every state can be written down and taken up again.
//
// A state is a plain struct with one member
//
//     template <class Archive> void fields(Archive& archive) { archive(a, b, c); }
//
// that names its parts once, for both directions. Saver appends little-endian bytes, Loader reads
// them and never trusts a size: a short or odd input makes ok() false and leaves the rest zero.
// Numbers keep their exact bits, so a restored state goes on to the same bytes.
#pragma once

#include <Eigen/Core>
#include <Eigen/Geometry>
#include <array>
#include <bit>
#include <cstddef>
#include <cstdint>
#include <cstring>
#include <optional>
#include <span>
#include <string>
#include <type_traits>
#include <vector>

namespace kedge {

static_assert(std::endian::native == std::endian::little, "archives are little-endian");

namespace detail {

template <class T>
concept Number = std::is_arithmetic_v<T> || std::is_enum_v<T>;

template <class T, class Archive>
concept HasFields = requires(T& value, Archive& archive) { value.fields(archive); };

/// What both directions share: how a value falls apart into numbers.
template <class Self>
class ArchiveBase {
 public:
  template <class... Ts>
  void operator()(Ts&... values) {
    (visit(values), ...);
  }

 private:
  Self& self() { return static_cast<Self&>(*this); }

  template <class T>
  void visit(T& value) {
    if constexpr (Number<T>) {
      self().number(value);
    } else {
      static_assert(HasFields<T, Self>, "a state needs fields()");
      value.fields(self());
    }
  }
  template <class S, int R, int C, int O>
  void visit(Eigen::Matrix<S, R, C, O>& matrix) {
    static_assert(R != Eigen::Dynamic && C != Eigen::Dynamic, "states have fixed sizes");
    for (Eigen::Index i = 0; i < matrix.size(); ++i) self().number(matrix.data()[i]);
  }
  template <class S>
  void visit(Eigen::Quaternion<S>& q) {
    visit(q.coeffs());
  }
  template <class T, std::size_t N>
  void visit(std::array<T, N>& values) {
    for (T& value : values) visit(value);
  }
  template <class T>
  void visit(std::optional<T>& value) {
    bool present = value.has_value();
    self().number(present);
    if constexpr (Self::loading) {
      value.reset();
      if (present) value.emplace();
    }
    if (value) visit(*value);
  }
  template <class T>
  void visit(std::vector<T>& values) {
    auto count = static_cast<std::uint64_t>(values.size());
    self().number(count);
    if constexpr (Self::loading) {
      values.clear();
      // Each element takes a byte at least, so a lying count cannot ask for more than is there.
      if (count > self().left()) {
        self().fail();
        return;
      }
      values.resize(static_cast<std::size_t>(count));
    }
    for (T& value : values) visit(value);
  }
};

}  // namespace detail

class Saver : public detail::ArchiveBase<Saver> {
 public:
  static constexpr bool loading = false;

  [[nodiscard]] static bool ok() { return true; }
  static void fail() {}
  template <detail::Number T>
  void number(const T& value) {
    const std::size_t at = bytes_.size();
    bytes_.resize(at + sizeof(T));
    std::memcpy(bytes_.data() + at, &value, sizeof(T));
  }
  [[nodiscard]] const std::vector<std::byte>& bytes() const { return bytes_; }

 private:
  std::vector<std::byte> bytes_;
};

class Loader : public detail::ArchiveBase<Loader> {
 public:
  static constexpr bool loading = true;

  explicit Loader(std::span<const std::byte> bytes) : bytes_(bytes) {}

  [[nodiscard]] bool ok() const { return ok_; }
  [[nodiscard]] std::size_t left() const { return bytes_.size(); }
  void fail() { ok_ = false; }
  template <detail::Number T>
  void number(T& value) {
    value = T{};
    if (!ok_ || bytes_.size() < sizeof(T)) {
      ok_ = false;
      return;
    }
    if constexpr (std::is_same_v<T, bool>) {
      const auto byte = std::to_integer<unsigned>(bytes_.front());
      if (byte > 1) ok_ = false;
      value = byte == 1;
    } else {
      std::memcpy(&value, bytes_.data(), sizeof(T));
    }
    bytes_ = bytes_.subspan(sizeof(T));
  }

 private:
  std::span<const std::byte> bytes_;
  bool ok_ = true;
};

}  // namespace kedge
