#include "app/processor.h"

namespace kedge::app {

std::string processor_features() {
#if defined(__x86_64__)
  std::string features = "x86_64";
  __builtin_cpu_init();
  if (__builtin_cpu_supports("avx")) features += " avx";
  if (__builtin_cpu_supports("avx2")) features += " avx2";
  if (__builtin_cpu_supports("fma")) features += " fma";
  if (__builtin_cpu_supports("avx512f")) features += " avx512f";
  return features;
#elif defined(__aarch64__)
  return "aarch64";
#else
  return "unknown";
#endif
}

}  // namespace kedge::app
