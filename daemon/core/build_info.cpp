#include "core/build_info.h"

#include <fmt/core.h>

namespace kedge {

namespace {
#if defined(__clang__)
constexpr const char* compiler = "clang " __clang_version__;
#else
constexpr const char* compiler = "g++ " __VERSION__;
#endif
#if defined(__x86_64__)
constexpr const char* target = "x86-64";
#elif defined(__aarch64__)
constexpr const char* target = "aarch64";
#else
constexpr const char* target = "other";
#endif
#if defined(__FMA__) || defined(__ARM_FEATURE_FMA)
constexpr const char* fused = "fma";
#else
constexpr const char* fused = "no fma";
#endif
}  // namespace

std::string_view version() { return KEDGE_VERSION; }

std::string build_identification() {
  return fmt::format("{}, {}, {} in the target, no contraction, no fast-math", compiler, target, fused);
}

}  // namespace kedge
