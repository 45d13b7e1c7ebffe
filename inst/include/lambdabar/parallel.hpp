// One loop over independent tasks, on several threads where OpenMP is there.
//
// Results never depend on the number of threads: callers cut the work into tasks by the
// data alone, each task writes only its own slot, and slots are combined in task order.
// A task must not throw and must not touch R.
#pragma once

#include "base.hpp"

namespace lambdabar {

template <class Task>
void for_each_task(Index n_tasks, int threads, const Task& task) {
#ifdef _OPENMP
#pragma omp parallel for schedule(dynamic, 1) num_threads(threads) if (threads > 1)
#endif
  for (Index i = 0; i < n_tasks; ++i) task(i);
#ifndef _OPENMP
  (void)threads;
#endif
}

}  // namespace lambdabar
