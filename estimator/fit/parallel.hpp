#pragma once

/// \file parallel.hpp
/// Fixed pieces of work over a few threads. What a piece computes never depends on who runs it, so
/// results are the same for any number of threads as long as pieces are joined in order.

#include <algorithm>
#include <atomic>
#include <cstddef>
#include <exception>
#include <mutex>
#include <thread>
#include <vector>

namespace softsill {

/// Number of threads to use when the user asked for `asked` (0: all cores).
inline int thread_count(int asked) {
  return asked > 0 ? asked : std::max(1, static_cast<int>(std::thread::hardware_concurrency()));
}

/// Calls work(piece) for piece = 0 .. pieces - 1. The first exception is thrown again here.
template <typename Work>
void parallel_for(int threads, std::size_t pieces, Work&& work) {
  const auto helpers =
      std::min<std::size_t>(pieces, static_cast<std::size_t>(std::max(1, threads))) -
      (pieces ? 1 : 0);
  std::atomic<std::size_t> next{0};
  std::exception_ptr failure;
  std::mutex guard;
  auto run = [&] {
    for (std::size_t piece = next++; piece < pieces; piece = next++) {
      try {
        work(piece);
      } catch (...) {
        const std::lock_guard<std::mutex> lock(guard);
        if (!failure) {
          failure = std::current_exception();
        }
      }
    }
  };
  std::vector<std::thread> crew;
  for (std::size_t i = 0; i < helpers; ++i) {
    crew.emplace_back(run);
  }
  run();
  for (std::thread& member : crew) {
    member.join();
  }
  if (failure) {
    std::rethrow_exception(failure);
  }
}

}  // namespace softsill
