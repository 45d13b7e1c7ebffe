// One loop over independent tasks, on several threads where OpenMP is there.
//
// Results never depend on the number of threads: callers cut the work into tasks by the
// data alone, each task writes only its own slot, and slots are combined in task order.
// A task must not throw and must not touch R.
//
// The program around the core may set `stop_requested`; it is asked on the calling thread
// between tasks, at most ten times a second, and an answer of true ends the loop with
// Error "interrupted".
#pragma once

#include "base.hpp"

#include <atomic>
#include <chrono>

#ifdef _OPENMP
#include <omp.h>
#endif

namespace lambdabar {

inline bool (*stop_requested)() = nullptr;

namespace detail {

inline bool on_calling_thread() {
#ifdef _OPENMP
  return omp_get_thread_num() == 0;
#else
  return true;
#endif
}

class StopWatch {
 public:
  bool stopped() const { return stopped_.load(std::memory_order_relaxed); }

  void ask() {
    if (!stop_requested || !on_calling_thread()) return;
    const Clock::time_point now = Clock::now();
    if (now - asked_ < std::chrono::milliseconds(100)) return;
    asked_ = now;
    if (stop_requested()) stopped_.store(true, std::memory_order_relaxed);
  }

 private:
  using Clock = std::chrono::steady_clock;
  std::atomic<bool> stopped_{false};
  Clock::time_point asked_;  // long ago: the first task asks
};

}  // namespace detail

template <class Task>
void for_each_task(Index n_tasks, int threads, const Task& task) {
  detail::StopWatch watch;
#ifdef _OPENMP
#pragma omp parallel for schedule(dynamic, 1) num_threads(threads) if (threads > 1)
#endif
  for (Index i = 0; i < n_tasks; ++i) {
    if (watch.stopped()) continue;
    task(i);
    watch.ask();
  }
#ifndef _OPENMP
  (void)threads;
#endif
  if (watch.stopped()) throw Error("interrupted", "The work was interrupted.");
}

}  // namespace lambdabar
