// The limits that a machine sets: reading columns once, in order, and doing next to nothing;
// writing a result of some size once, on fresh pages.
#include <Rcpp.h>

#include <sys/mman.h>

#include <algorithm>
#include <chrono>
#include <cstdint>
#include <ctime>

namespace {

// Eight sums, so that no addition waits for the one before and memory sets the pace.
double read_doubles(const double* x, R_xlen_t n) {
  double s[8] = {0, 0, 0, 0, 0, 0, 0, 0};
  R_xlen_t i = 0;
  for (; i + 8 <= n; i += 8) {
    for (int lane = 0; lane < 8; ++lane) s[lane] += x[i + lane];
  }
  for (; i < n; ++i) s[0] += x[i];
  return ((s[0] + s[1]) + (s[2] + s[3])) + ((s[4] + s[5]) + (s[6] + s[7]));
}

double read_integers(const int* x, R_xlen_t n) {
  std::int64_t sum = 0;
  for (R_xlen_t i = 0; i < n; ++i) sum += x[i];
  return static_cast<double>(sum);
}

double read_column(SEXP column) {
  if (TYPEOF(column) == REALSXP) return read_doubles(REAL(column), Rf_xlength(column));
  if (TYPEOF(column) == INTSXP) return read_integers(INTEGER(column), Rf_xlength(column));
  Rcpp::stop("a column to read must be double or integer");
}

}  // namespace

// CPU and wall seconds of the quickest of `repeats` reads of all columns on this thread.
// `sum` depends on every value, so no read can be left out.
// [[Rcpp::export(rng = false)]]
Rcpp::NumericVector read_columns(const Rcpp::List& columns, int repeats) {
  using Clock = std::chrono::steady_clock;
  double cpu = R_PosInf, wall = R_PosInf, sum = 0;
  for (int r = 0; r < repeats; ++r) {
    const std::clock_t cpu_start = std::clock();
    const Clock::time_point start = Clock::now();
    sum = 0;
    for (R_xlen_t j = 0; j < columns.size(); ++j) sum += read_column(columns[j]);
    const std::chrono::duration<double> passed = Clock::now() - start;
    cpu = std::min(cpu, static_cast<double>(std::clock() - cpu_start) / CLOCKS_PER_SEC);
    wall = std::min(wall, passed.count());
  }
  return Rcpp::NumericVector::create(
      Rcpp::_["cpu"] = cpu, Rcpp::_["wall"] = wall, Rcpp::_["sum"] = sum);
}

// Maps so many bytes of fresh memory, writes all of them once and lets them go.
// [[Rcpp::export(rng = false)]]
double write_fresh(double bytes) {
  const auto size = static_cast<std::size_t>(bytes);
  void* memory = mmap(nullptr, size, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
  if (memory == MAP_FAILED) Rcpp::stop("no memory for %.0f bytes", bytes);
  auto* values = static_cast<volatile double*>(memory);
  for (std::size_t i = 0; i < size / sizeof(double); ++i) values[i] = 1.0;
  const double last = values[size / sizeof(double) - 1];
  munmap(memory, size);
  return last;
}
