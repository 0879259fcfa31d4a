# Tests that are programs of their own: structure, the real binary from end to end, other languages.
# Debian's Python is named, for astropy and numpy are installed for it alone.
set(PYTHON /usr/bin/python3)

function(straymark_script_test name timeout)
  add_test(NAME "${name}" COMMAND ${ARGN} WORKING_DIRECTORY ${PROJECT_SOURCE_DIR})
  set_tests_properties("${name}" PROPERTIES TIMEOUT ${timeout})
endfunction()

straymark_script_test("structure: includes" 60
  ${PYTHON} tests/structure/include_rule.py ${PROJECT_SOURCE_DIR})
straymark_script_test("structure: the include rule sees what is planted" 60
  ${PYTHON} tests/structure/include_rule_test.py)
straymark_script_test("structure: format" 120 tests/format.sh --check)

# A build of their own each, with its compilers on all cores: not beside other tests.
straymark_script_test("sanitizers: addresses and undefined behaviour" 1800
  tests/sanitize.sh asan-ubsan)
straymark_script_test("sanitizers: threads" 1800 tests/sanitize.sh tsan)
set_tests_properties("sanitizers: addresses and undefined behaviour"
  "sanitizers: threads" PROPERTIES RUN_SERIAL ON)

add_executable(config_probe io/config_probe.cpp)
target_link_libraries(config_probe PRIVATE straymark_io fmt::fmt)
straymark_script_test("io: schemas and program give the same verdict" 120
  ${PYTHON} tests/io/schema_test.py $<TARGET_FILE:config_probe> ${PROJECT_SOURCE_DIR})

straymark_script_test("study: a small sabotage" 600
  ${PYTHON} tests/study/sabotage.py $<TARGET_FILE:straymark> tests/study/small_night.yaml)

straymark_script_test("end to end: real frames and headers" 300
  ${PYTHON} tests/end_to_end/real_frames_test.py $<TARGET_FILE:straymark>)
straymark_script_test("end to end: a night" 600
  ${PYTHON} tests/end_to_end/night_test.py $<TARGET_FILE:straymark>
  ${CMAKE_CURRENT_BINARY_DIR}/night_work)
straymark_script_test("end to end: bad input" 600
  ${PYTHON} tests/end_to_end/bad_input_test.py $<TARGET_FILE:straymark>
  ${CMAKE_CURRENT_BINARY_DIR}/bad_input_work)
straymark_script_test("end to end: death at any moment" 600
  ${PYTHON} tests/end_to_end/kill_test.py $<TARGET_FILE:straymark>
  ${CMAKE_CURRENT_BINARY_DIR}/kill_work)
straymark_script_test("end to end: a published coupling table" 300
  ${PYTHON} tests/end_to_end/published_coupling_test.py $<TARGET_FILE:straymark>)
straymark_script_test("end to end: a dense sum in numpy" 300
  ${PYTHON} tests/end_to_end/dense_crosstalk_test.py $<TARGET_FILE:straymark>
  ${CMAKE_CURRENT_BINARY_DIR}/small_night)

# Benches: not tests, for a shared machine's times decide nothing. tests/bench/build_bench.py runs them.
add_executable(mask_floor bench/mask_floor.cpp)
target_link_libraries(mask_floor PRIVATE PkgConfig::cfitsio)
add_executable(mask_in_memory bench/mask_in_memory.cpp ${PROJECT_SOURCE_DIR}/src/cli/observatory.cpp)
target_link_libraries(mask_in_memory PRIVATE straymark_io fmt::fmt)

# libFuzzer programs, by tests/fuzz/run.sh: their own build with clang.
if(STRAYMARK_FUZZ)
  file(GLOB fuzz_sources CONFIGURE_DEPENDS ${CMAKE_CURRENT_SOURCE_DIR}/fuzz/*_fuzz.cpp)
  foreach(source ${fuzz_sources})
    get_filename_component(name ${source} NAME_WE)
    add_executable(${name} ${source})
    target_link_libraries(${name} PRIVATE straymark_io fmt::fmt)
    target_include_directories(${name} PRIVATE ${CMAKE_CURRENT_SOURCE_DIR})
    target_compile_definitions(${name} PRIVATE STRAYMARK_TEST_DATA="${CMAKE_CURRENT_SOURCE_DIR}")
    target_link_options(${name} PRIVATE -fsanitize=fuzzer)
    list(APPEND fuzz_programs ${name})
  endforeach()
  add_custom_target(fuzzers DEPENDS ${fuzz_programs})
endif()
