// Types and the one exception class that every part of the core uses.
#pragma once

#include <Eigen/Dense>

#include <limits>
#include <stdexcept>
#include <string>
#include <utility>
#include <vector>

namespace lambdabar {

using Index = Eigen::Index;
using Matrix = Eigen::MatrixXd;
using Vector = Eigen::VectorXd;

inline constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

// A request that the core cannot meet. `tag` names the kind ("rank", "unsupported",
// "input", ...), `facts` are named numbers that a caller may show to its user.
class Error : public std::runtime_error {
 public:
  using Facts = std::vector<std::pair<std::string, double>>;
  Error(std::string tag, const std::string& message, Facts facts = {})
      : std::runtime_error(message), tag_(std::move(tag)), facts_(std::move(facts)) {}
  const std::string& tag() const { return tag_; }
  const Facts& facts() const { return facts_; }

 private:
  std::string tag_;
  Facts facts_;
};

}  // namespace lambdabar
