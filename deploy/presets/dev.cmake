# For daily work: assertions on, debug information, warnings as errors.
set(CMAKE_BUILD_TYPE Debug CACHE STRING "")
set(CMAKE_CXX_FLAGS_DEBUG "-Og -g1" CACHE STRING "")
set(TAILWEIR_WERROR ON CACHE BOOL "")
