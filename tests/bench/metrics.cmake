# Measures of spike trains against textbook loops; included by CMakeLists.txt.
add_executable(metrics_bench metrics_bench.cpp)
target_link_libraries(metrics_bench PRIVATE
  softsill::trains softsill::reliability softsill::inference benchmark::benchmark)
target_include_directories(metrics_bench PRIVATE ${PROJECT_SOURCE_DIR})
# So that it cannot rot, and so that the fast ways keep giving what the textbook loops give.
add_test(NAME bench.metrics COMMAND metrics_bench --benchmark_filter=banded|linear --benchmark_min_time=0.01)
