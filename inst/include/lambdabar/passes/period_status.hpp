// What became of one period's cross-section.
#pragma once

namespace lambdabar {

enum class PeriodStatus {
  estimated = 0,
  too_few_assets = 1,
  rank_deficient = 2,
  no_variation = 3,
  empty = 4,            // no complete row
  weak_instruments = 5  // the two halves' betas are too weakly related
};

}  // namespace lambdabar
