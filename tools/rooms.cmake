# What every target of ours shares: warnings as errors, include root, one precompiled header.

set(KEDGE_WARNINGS -Wall -Wextra -Wpedantic -Wshadow -Wconversion -Wold-style-cast -Wnon-virtual-dtor
                   -Woverloaded-virtual -Werror)
if(CMAKE_CXX_COMPILER_ID STREQUAL "GNU")
  # Eigen's fixed-size kernels set it off falsely under g++ 12.
  list(APPEND KEDGE_WARNINGS -Wno-maybe-uninitialized -Wno-array-bounds -Wno-stringop-overflow)
endif()

# kedge_room(NAME LIBRARIES ...): the folder's *.cpp as the static library kedge_NAME.
function(kedge_room name)
  cmake_parse_arguments(ARG "" "" "LIBRARIES" ${ARGN})
  file(GLOB sources CONFIGURE_DEPENDS ${CMAKE_CURRENT_SOURCE_DIR}/${name}/*.cpp)
  add_library(kedge_${name} STATIC ${sources})
  target_link_libraries(kedge_${name} PUBLIC kedge_base ${ARG_LIBRARIES})
  target_compile_options(kedge_${name} PRIVATE ${KEDGE_WARNINGS})
  target_precompile_headers(kedge_${name} REUSE_FROM kedge_pch)
endfunction()

# kedge_program(NAME LIBRARIES ...): the folder's *.cpp as the program kedge-NAME.
function(kedge_program name)
  cmake_parse_arguments(ARG "" "" "LIBRARIES" ${ARGN})
  file(GLOB sources CONFIGURE_DEPENDS ${CMAKE_CURRENT_SOURCE_DIR}/${name}/*.cpp)
  add_executable(kedge-${name} ${sources})
  target_link_libraries(kedge-${name} PRIVATE kedge_base ${ARG_LIBRARIES})
  target_include_directories(kedge-${name} PRIVATE ${CMAKE_CURRENT_SOURCE_DIR})
  target_compile_options(kedge-${name} PRIVATE ${KEDGE_WARNINGS})
  install(TARGETS kedge-${name})
endfunction()

# kedge_tests(NAME LIBRARIES ... [LABEL full]): the folder's *_test.cpp as the program test_NAME.
function(kedge_tests name)
  cmake_parse_arguments(ARG "" "LABEL" "LIBRARIES" ${ARGN})
  file(GLOB sources CONFIGURE_DEPENDS ${CMAKE_CURRENT_SOURCE_DIR}/${name}/*_test.cpp)
  if(NOT ARG_LABEL)
    set(ARG_LABEL quick)
  endif()
  add_executable(test_${name} ${sources})
  target_link_libraries(test_${name} PRIVATE kedge_test_main ${ARG_LIBRARIES})
  target_compile_options(test_${name} PRIVATE ${KEDGE_WARNINGS} -Wno-conversion)
  target_precompile_headers(test_${name} REUSE_FROM kedge_test_main)
  # Statistics over many runs show nothing more under sanitizers.
  add_test(NAME ${name} COMMAND test_${name} $<$<BOOL:${KEDGE_SANITIZE}>:~[statistics]>)
  set_tests_properties(${name} PROPERTIES LABELS ${ARG_LABEL} TIMEOUT 600)
endfunction()
