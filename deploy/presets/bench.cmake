# Benchmarks and studies (tests/bench), optimised.
set(CMAKE_BUILD_TYPE Release CACHE STRING "")
set(TAILWEIR_BENCH ON CACHE BOOL "")
