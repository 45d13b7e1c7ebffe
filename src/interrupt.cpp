#include <RcppEigen.h>

#include <lambdabar/parallel.hpp>

namespace {

void check_interrupt(void*) { R_CheckUserInterrupt(); }

bool user_interrupts() { return R_ToplevelExec(check_interrupt, nullptr) == FALSE; }

}  // namespace

// [[Rcpp::init]]
void watch_for_interrupts(DllInfo* /*dll*/) { lambdabar::stop_requested = user_interrupts; }
