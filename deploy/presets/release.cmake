# What users build: optimised, warnings shown. Use: cmake -C deploy/presets/release.cmake
set(CMAKE_BUILD_TYPE Release CACHE STRING "")
