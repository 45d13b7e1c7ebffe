#include <gtest/gtest.h>

#include <lambdabar/parallel.hpp>

#include <chrono>
#include <thread>

namespace {

using lambdabar::Index;

TEST(ForEachTask, RunsEveryTaskOnceOnAnyNumberOfThreads) {
  for (int threads : {1, 2, 5}) {
    std::vector<int> runs(1000, 0);
    lambdabar::for_each_task(1000, threads, [&](Index i) { ++runs[static_cast<std::size_t>(i)]; });
    EXPECT_EQ(runs, std::vector<int>(1000, 1)) << threads;
  }
}

TEST(ForEachTask, StopsWhenAskedAndSaysSo) {
  lambdabar::stop_requested = [] { return true; };
  for (int threads : {1, 2}) {
    std::atomic<int> runs{0};
    auto task = [&](Index) {
      ++runs;
      std::this_thread::sleep_for(std::chrono::milliseconds(1));
    };
    try {
      lambdabar::for_each_task(1000, threads, task);
      FAIL() << "not interrupted";
    } catch (const lambdabar::Error& error) {
      EXPECT_EQ(error.tag(), "interrupted");
    }
    EXPECT_LT(runs.load(), 500);
  }
  lambdabar::stop_requested = nullptr;
}

TEST(ForEachTask, GoesOnWhenNotAskedToStop) {
  lambdabar::stop_requested = [] { return false; };
  int runs = 0;
  lambdabar::for_each_task(10, 1, [&](Index) { ++runs; });
  EXPECT_EQ(runs, 10);
  lambdabar::stop_requested = nullptr;
}

}  // namespace
