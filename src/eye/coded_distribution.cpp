#include "tapwright/eye/coded_distribution.hpp"

#include <algorithm>
#include <boost/math/tools/toms748_solve.hpp>
#include <cmath>
#include <complex>
#include <map>
#include <numbers>
#include <optional>
#include <stdexcept>
#include <string>
#include <utility>
#include <vector>

#include "tapwright/base/normal.hpp"
#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {
namespace {

constexpr int kLanes = 8;                // points of the contour in one pass
constexpr double kMostExponent = 600.0;  // exp of it and of minus it are far from the limits

void check(const CodedDisturbance& disturbance) {
  if (disturbance.main_index < 0 || disturbance.main_index >= disturbance.row.size()) {
    throw std::invalid_argument(
        "coded distribution: main_index = " + std::to_string(disturbance.main_index) +
        ", but the row has " + std::to_string(disturbance.row.size()) + " cursors");
  }
}

void check_probability(double probability) {
  if (!(probability > 0.0 && probability < 0.5)) {
    throw std::invalid_argument("exceeded_level_v: the probability must lie between 0 and 0.5");
  }
}

/// One section of the code as it meets the row.
struct Block {
  std::size_t section = 0;
  Eigen::Index at = 0;   // place of its first symbol in the order sent; may lie before the row
  int main_offset = -1;  // place of the main symbol in it
};

/// The row under one position of the main symbol and one direction of the push.
struct Path {
  bool upward = false;
  std::vector<Block> blocks;
};

std::vector<Path> paths_of(const LineCode& code, Eigen::Index num_cursors,
                           Eigen::Index main_in_order) {
  std::vector<Path> out;
  const Eigen::Index period = code.period();
  for (Eigen::Index p = 0; p < period; ++p) {
    const auto first = static_cast<int>(((p - main_in_order) % period + period) % period);
    const LineCode::Place place = code.place(first);
    Path path;
    auto section = static_cast<std::size_t>(place.section);
    for (Eigen::Index at = -place.offset; at < num_cursors;) {
      const int n = code.sections()[section].num_symbols();
      const bool main = main_in_order >= at && main_in_order < at + n;
      path.blocks.push_back({section, at, main ? static_cast<int>(main_in_order - at) : -1});
      at += n;
      section = (section + 1) % code.sections().size();
    }
    out.push_back(path);
    if (code.symmetric()) continue;  // upward is then as likely as downward
    path.upward = true;
    out.push_back(std::move(path));
  }
  return out;
}

bool can_be_pushed(double main_symbol, bool upward) { return main_symbol != (upward ? 1.0 : -1.0); }

/// Words of a section that random data send, by branch: the key in a table of sums, and how likely.
struct Sent {
  int from = 0;
  int to = 0;
  std::vector<std::pair<std::size_t, double>> words;
};
std::vector<Sent> sent_of(const LineCode::Section& section) {
  std::vector<Sent> out;
  for (const LineCode::Branch& branch : section.branches) {
    Sent sent{branch.from, branch.to, {}};
    for (auto i = static_cast<std::size_t>(branch.first); i < static_cast<std::size_t>(branch.last);
         ++i) {
      if (section.probability[i] > 0.0) {
        sent.words.emplace_back(static_cast<std::size_t>(section.key[i]), section.probability[i]);
      }
    }
    if (!sent.words.empty()) out.push_back(std::move(sent));
  }
  return out;
}

/// ln E[exp(x a)] of one symbol a of evenly spaced, equally likely levels.
double log_moment(double x, int levels) {
  double sum = 0.0;
  for (int l = 0; l < levels; ++l) {
    sum += std::exp(x * (2.0 * l / (levels - 1) - 1.0) - std::abs(x));
  }
  return std::abs(x) + std::log(sum / levels);
}

/// E[exp((x + iy) a)] / E[exp(x a)].
std::complex<double> moment_ratio(double x, double y, int levels) {
  double scale = 0.0;
  std::complex<double> sum = 0.0;
  for (int l = 0; l < levels; ++l) {
    const double a = 2.0 * l / (levels - 1) - 1.0;
    const double weight = std::exp(x * a - std::abs(x));
    scale += weight;
    sum += std::polar(weight, y * a);
  }
  return sum / scale;
}

struct Lanes {
  double re[kLanes];
  double im[kLanes];
};
Lanes times(const Lanes& a, const Lanes& b) {
  Lanes out;
  for (int l = 0; l < kLanes; ++l) {
    out.re[l] = a.re[l] * b.re[l] - a.im[l] * b.im[l];
    out.im[l] = a.re[l] * b.im[l] + a.im[l] * b.re[l];
  }
  return out;
}
void add_scaled(Lanes& sum, double factor, const Lanes& x) {
  for (int l = 0; l < kLanes; ++l) sum.re[l] += factor * x.re[l];
  for (int l = 0; l < kLanes; ++l) sum.im[l] += factor * x.im[l];
}
void add_product(Lanes& sum, const Lanes& a, const Lanes& b) {
  for (int l = 0; l < kLanes; ++l) {
    sum.re[l] += a.re[l] * b.re[l] - a.im[l] * b.im[l];
    sum.im[l] += a.re[l] * b.im[l] + a.im[l] * b.re[l];
  }
}

/// The moment generating function M(z) = E[exp(z X)], z = theta + iy. Magnitudes, which only depend
/// on theta, are laid out once and scaled block by block so that no exponent is too large.
class Moments {
 public:
  Moments(const LineCode& code, const CodedDisturbance& disturbance)
      : code_(code), others_(disturbance.others) {
    check(disturbance);
    const Eigen::Index n = disturbance.row.size();
    const Eigen::Index main_in_order = n - 1 - disturbance.main_index;
    pad_ = code.max_symbols();
    weight_ = Eigen::VectorXd::Zero(n + 2 * pad_);
    weight_.segment(pad_, n) = -disturbance.row.reverse();
    weight_[pad_ + main_in_order] = 0.0;
    paths_ = paths_of(code, n, main_in_order);
    for (const LineCode::Section& section : code.sections()) sent_.push_back(sent_of(section));
    log_pushed_ = log_code_moment(0.0);
  }

  /// K(theta) = ln M(theta); `ratios` is then about this theta.
  double set_theta(double theta) {
    double k = log_code_moment(theta) - log_pushed_;
    for (const double b : others_.symbols_v) k += log_moment(theta * b, others_.levels);
    for (const double b : others_.binary_v) k += log_moment(theta * b, 2);
    return k + 0.5 * theta * theta * others_.sigma_v * others_.sigma_v;
  }

  /// M(theta + i m step) / M(theta) for m = first ... first + kLanes - 1.
  [[nodiscard]] Lanes ratios(double step, Eigen::Index first) const;

 private:
  const LineCode::Section& section_of(const Block& block) const {
    return code_.sections()[block.section];
  }
  double log_code_moment(double theta);
  double append_magnitudes(const Block& block, bool upward);

  const LineCode& code_;
  const Disturbance& others_;
  Eigen::Index pad_ = 0;
  Eigen::VectorXd weight_;  // of the downward push, in the order sent, zeros around it
  std::vector<Path> paths_;
  std::vector<std::vector<Sent>> sent_;  // by section
  double log_pushed_ = 0.0;              // ln of the probability that the main symbol can be pushed

  double theta_ = 0.0;
  std::vector<double> magnitude_;   // of every key of every block of every path
  std::vector<double> norm_;        // by which each block's result is multiplied
  std::vector<double> path_share_;  // of M(theta)
  std::vector<double> path_sum_;    // over the last states
};

// Appends exp(theta s - shift) for the sum s of every key and returns the shift.
double Moments::append_magnitudes(const Block& block, bool upward) {
  const LineCode::Section& section = section_of(block);
  const int n = section.num_symbols();
  const auto num_keys = static_cast<std::size_t>(section.num_keys());
  const std::size_t start = magnitude_.size();
  magnitude_.resize(start + num_keys);
  double* const out = magnitude_.data() + start;
  const double sign = upward ? -theta_ : theta_;
  const auto x = [&](int i) { return sign * weight_[pad_ + block.at + i]; };
  double shift = 0.0;
  double reach = 0.0;
  for (int i = 0; i < n; ++i) reach += std::abs(x(i));
  if (section.by_bits && 2.0 * reach < kMostExponent) {
    shift = reach;
    double lowest = -shift;
    for (int i = 0; i < n; ++i) lowest -= x(i);
    out[0] = std::exp(lowest);
    for (int i = 0; i < n; ++i) {
      const double factor = std::exp(2.0 * x(i));
      const int half = 1 << i;
      for (int b = 0; b < half; ++b) out[half + b] = out[b] * factor;
    }
  } else {
    // Exponents first, then those of the words that there are less the largest of them.
    shift = -HUGE_VAL;
    for (const Sent& sent : sent_[block.section]) {
      for (const auto& [key, probability] : sent.words) {
        double sum = 0.0;
        for (int i = 0; i < n; ++i) {
          const double symbol = section.by_bits ? ((key >> i & 1U) ? 1.0 : -1.0)
                                                : section.words(i, static_cast<Eigen::Index>(key));
          sum += x(i) * symbol;
        }
        out[key] = sum;
        shift = std::max(shift, sum);
      }
    }
    for (std::size_t key = 0; key < num_keys; ++key) {
      out[key] = std::exp(std::min(0.0, out[key] - shift));
    }
  }
  if (block.main_offset >= 0) {
    for (Eigen::Index w = 0; w < section.words.cols(); ++w) {
      if (!can_be_pushed(section.words(block.main_offset, w), upward)) {
        out[section.key[static_cast<std::size_t>(w)]] = 0.0;
      }
    }
  }
  return shift;
}

double Moments::log_code_moment(double theta) {
  theta_ = theta;
  magnitude_.clear();
  norm_.clear();
  path_sum_.clear();
  std::vector<double> log_path;
  std::vector<double> state;
  std::vector<double> next;
  for (const Path& path : paths_) {
    const Eigen::VectorXd& start = code_.state_probability(path.blocks.front().section);
    state.assign(start.begin(), start.end());
    double log_scale = 0.0;
    for (const Block& block : path.blocks) {
      const std::size_t table = magnitude_.size();
      log_scale += append_magnitudes(block, path.upward);
      next.assign(static_cast<std::size_t>(section_of(block).num_to), 0.0);
      double most = 0.0;
      for (const Sent& sent : sent_[block.section]) {
        double sum = 0.0;
        for (const auto& [key, probability] : sent.words) {
          sum += probability * magnitude_[table + key];
        }
        double& to = next[static_cast<std::size_t>(sent.to)];
        to += state[static_cast<std::size_t>(sent.from)] * sum;
        most = std::max(most, to);
      }
      const double norm = most > 0.0 ? 1.0 / most : 0.0;  // 0: no main symbol to push
      norm_.push_back(norm);
      log_scale += std::log(most);
      for (double& value : next) value *= norm;
      std::swap(state, next);
    }
    double sum = 0.0;
    for (const double value : state) sum += value;
    path_sum_.push_back(sum);
    log_path.push_back(log_scale + std::log(sum));
  }
  const double most = *std::max_element(log_path.begin(), log_path.end());
  double sum = 0.0;
  for (const double l : log_path) sum += std::exp(l - most);
  path_share_.clear();
  for (const double l : log_path) path_share_.push_back(std::exp(l - most) / sum);
  return most + std::log(sum);
}

Lanes Moments::ratios(double step, Eigen::Index first) const {
  double y[kLanes];
  for (int l = 0; l < kLanes; ++l) y[l] = step * static_cast<double>(first + l);
  // exp(iyw) of every symbol, shared by all paths.
  std::vector<Lanes> turn(static_cast<std::size_t>(weight_.size()));
  for (std::size_t i = 0; i < turn.size(); ++i) {
    const double w = weight_[static_cast<Eigen::Index>(i)];
    for (int l = 0; l < kLanes; ++l) {
      turn[i].re[l] = std::cos(y[l] * w);
      turn[i].im[l] = std::sin(y[l] * w);
    }
  }
  const auto turned = [&](Eigen::Index at, bool backwards) {
    Lanes out = turn[static_cast<std::size_t>(pad_ + at)];
    if (backwards) {
      for (double& im : out.im) im = -im;
    }
    return out;
  };

  std::vector<Lanes> table(static_cast<std::size_t>(code_.max_keys()));
  std::vector<Lanes> state(static_cast<std::size_t>(code_.max_states()));
  std::vector<Lanes> next(state.size());
  Lanes total{};
  const double* magnitude = magnitude_.data();
  const double* norm = norm_.data();
  for (std::size_t p = 0; p < paths_.size(); ++p) {
    const Path& path = paths_[p];
    const Eigen::VectorXd& start = code_.state_probability(path.blocks.front().section);
    for (Eigen::Index s = 0; s < start.size(); ++s) {
      Lanes& lanes = state[static_cast<std::size_t>(s)];
      std::fill_n(lanes.re, kLanes, start[s]);
      std::fill_n(lanes.im, kLanes, 0.0);
    }
    for (const Block& block : path.blocks) {
      const LineCode::Section& section = section_of(block);
      const int n = section.num_symbols();
      if (section.by_bits) {
        table[0] = turned(block.at, !path.upward);
        for (int i = 1; i < n; ++i) table[0] = times(table[0], turned(block.at + i, !path.upward));
        for (int i = 0; i < n; ++i) {
          const Lanes once = turned(block.at + i, path.upward);
          const Lanes twice = times(once, once);
          const std::size_t half = std::size_t{1} << i;
          for (std::size_t b = 0; b < half; ++b) table[half + b] = times(table[b], twice);
        }
      } else {
        const Eigen::VectorXd sums = (path.upward ? -1.0 : 1.0) * section.words.transpose() *
                                     weight_.segment(pad_ + block.at, n);
        for (Eigen::Index w = 0; w < sums.size(); ++w) {
          Lanes& lanes = table[static_cast<std::size_t>(w)];
          for (int l = 0; l < kLanes; ++l) {
            lanes.re[l] = std::cos(y[l] * sums[w]);
            lanes.im[l] = std::sin(y[l] * sums[w]);
          }
        }
      }
      std::fill_n(next.begin(), section.num_to, Lanes{});
      for (const Sent& sent : sent_[block.section]) {
        Lanes sum{};
        for (const auto& [key, probability] : sent.words) {
          add_scaled(sum, probability * magnitude[key] * *norm, table[key]);
        }
        add_product(next[static_cast<std::size_t>(sent.to)],
                    state[static_cast<std::size_t>(sent.from)], sum);
      }
      std::swap(state, next);
      magnitude += section.num_keys();
      ++norm;
    }
    if (path_share_[p] > 0.0) {
      const int num_last = section_of(path.blocks.back()).num_to;
      for (int s = 0; s < num_last; ++s) {
        add_scaled(total, path_share_[p] / path_sum_[p], state[static_cast<std::size_t>(s)]);
      }
    }
  }
  for (int l = 0; l < kLanes; ++l) {
    const double noise = y[l] * others_.sigma_v;
    std::complex<double> rest =
        std::polar(std::exp(-0.5 * noise * noise), theta_ * others_.sigma_v * noise);
    for (const double b : others_.symbols_v) {
      rest *= moment_ratio(theta_ * b, y[l] * b, others_.levels);
    }
    for (const double b : others_.binary_v) rest *= moment_ratio(theta_ * b, y[l] * b, 2);
    const std::complex<double> value = std::complex<double>(total.re[l], total.im[l]) * rest;
    total.re[l] = value.real();
    total.im[l] = value.imag();
  }
  return total;
}

/// ln P(X > x) by the trapezoid rule on the line through theta; its points don't depend on x.
struct Contour {
  double theta = 0.0;
  double k = 0.0;  // K(theta)
  double step = 0.0;
  std::vector<std::complex<double>> terms;  // M(z) / (z e^K), the first one halved

  [[nodiscard]] double log_exceedance(double x) const {
    double sum = 0.0;
    // The angle of every 32nd term is computed, those between turn on from it.
    const std::complex<double> turn = std::polar(1.0, -step * x);
    std::complex<double> angle = 1.0;
    for (std::size_t m = 0; m < terms.size(); ++m) {
      angle = m % 32 == 0 ? std::polar(1.0, -step * x * static_cast<double>(m)) : angle * turn;
      sum += terms[m].real() * angle.real() - terms[m].imag() * angle.imag();
    }
    return k - theta * x + std::log(sum * step / std::numbers::pi);
  }
};

double reach_v(const CodedDisturbance& d) {
  return d.row.lpNorm<1>() - std::abs(d.row[d.main_index]) + d.others.worst_v();
}

}  // namespace

/// Lines theta_0 ratio^k, computed when first asked for.
class CodedTail::Ladder {
 public:
  Ladder(const LineCode& code, CodedDisturbance disturbance)
      : code_(code), disturbance_(std::move(disturbance)) {
    check(disturbance_);
    given_sigma_v_ = disturbance_.others.sigma_v;
    reach_v_ = reach_v(disturbance_);
    if (reach_v_ == 0.0) return;
    moments_.emplace(code_, disturbance_);
    // K is mean theta + variance theta^2 / 2 near 0; a rough measure is all that's used.
    const double theta = 0.01 / (reach_v_ + given_sigma_v_);
    const double above = moments_->set_theta(theta);
    const double below = moments_->set_theta(-theta);
    mean_v_ = (above - below) / (2.0 * theta);
    deviation_v_ = std::sqrt(std::max(0.0, above + below)) / theta;
    // A sum that hardly varies is all mean; noise of a share of its size then ends the line.
    const double least_v = std::max(0.01 * deviation_v_, 1e-6 * reach_v_);
    if (given_sigma_v_ < least_v) {
      // Additions that a grid takes, per 1 / step.
      double num_words = 0.0;
      for (const LineCode::Section& section : code_.sections()) {
        num_words += static_cast<double>(section.words.cols());
      }
      const double work_v =
          2.0 * static_cast<double>(disturbance_.row.size()) * num_words * reach_v_;
      const double step_v = std::max(work_v / 1e8, deviation_v_ / 4000.0);
      if (step_v <= deviation_v_ / 1000.0) grid_ = coded_grid(code_, disturbance_, step_v);
    }
    disturbance_.others.sigma_v = std::max(given_sigma_v_, least_v);
    deviation_v_ = std::max(deviation_v_, least_v);
  }

  [[nodiscard]] bool only_noise() const { return reach_v_ == 0.0; }
  [[nodiscard]] const std::optional<CodedGrid>& grid() const { return grid_; }
  [[nodiscard]] double given_sigma_v() const { return given_sigma_v_; }
  [[nodiscard]] bool has_more_noise() const { return disturbance_.others.sigma_v > given_sigma_v_; }
  [[nodiscard]] double deviation_v() const { return deviation_v_; }
  [[nodiscard]] double mean_v() const { return mean_v_; }
  /// To be taken off a level found on a line.
  [[nodiscard]] double correction_v(double theta) const {
    const double sigma_v = disturbance_.others.sigma_v;
    return 0.5 * theta * (sigma_v * sigma_v - given_sigma_v_ * given_sigma_v_);
  }
  /// What nothing but noise can pass.
  [[nodiscard]] double worst_v() const {
    return CodedIsi(code_, disturbance_.row.size(), disturbance_.main_index)
               .worst(disturbance_.row) +
           disturbance_.others.worst_v();
  }

  /// The line where `cost(theta, K(theta))`, which has one minimum, is least on the ladder.
  template <class Cost>
  const Contour& best(double guess_theta, Cost cost) {
    const auto cost_of = [&](int rung) { return cost(theta_of(rung), k_of(rung)); };
    int rung =
        std::max(kLowestRung,
                 static_cast<int>(std::lround(std::log(guess_theta * deviation_v_) / kLogRatio)));
    double here = cost_of(rung);
    const int direction = cost_of(rung + 1) < here ? 1 : -1;
    while (rung + direction >= kLowestRung) {
      const double next = cost_of(rung + direction);
      if (!(next < here)) break;
      here = next;
      rung += direction;
    }
    return contour(rung);
  }

 private:
  static constexpr double kLogRatio = 0.26236426446749106;  // ln 1.3
  static constexpr int kLowestRung = -3;  // half over the deviation serves all of the middle

  [[nodiscard]] double theta_of(int rung) const {
    return std::exp(kLogRatio * rung) / deviation_v_;
  }
  double k_of(int rung) {
    const auto [it, fresh] = k_.try_emplace(rung, 0.0);
    if (fresh) {
      it->second = moments_->set_theta(theta_of(rung));
    }
    return it->second;
  }
  const Contour& contour(int rung) {
    const auto found = contours_.find(rung);
    if (found != contours_.end()) return found->second;
    Contour out;
    out.theta = theta_of(rung);
    const double slope_above = (k_of(rung + 1) - k_of(rung)) / (theta_of(rung + 1) - out.theta);
    const double slope_below = (k_of(rung) - k_of(rung - 1)) / (out.theta - theta_of(rung - 1));
    const double variance = std::max(
        0.0, 2.0 * (slope_above - slope_below) / (theta_of(rung + 1) - theta_of(rung - 1)));
    // What the rule adds is P at x -+ the period, tilted. On the one side that is below e^-17 of P
    // at the level K' whose saddle point this line is, and below e^-14 at those the next lines
    // serve (P is 1 / (theta s sqrt(2 pi)) below its Chernoff bound: 5 covers that); on the other,
    // nine standard deviations into the tilted distribution.
    const double level_v = 0.5 * (slope_above + slope_below);
    const double log_inverse = std::max(0.0, out.theta * level_v - k_of(rung)) + 5.0;
    const double period = std::max((log_inverse + 17.0) / out.theta, 9.0 * std::sqrt(variance));
    out.step = 2.0 * std::numbers::pi / period;
    // The noise alone pushes the integrand below 1e-9 of its start from there on.
    const double end = std::sqrt(2.0 * std::log(1e9)) / disturbance_.others.sigma_v / out.step;
    out.k = k_of(rung);
    moments_->set_theta(out.theta);
    for (Eigen::Index m = 0; static_cast<double>(m) <= end; m += kLanes) {
      const Lanes lanes = moments_->ratios(out.step, m);
      for (int l = 0; l < kLanes; ++l) {
        const std::complex<double> z(out.theta, out.step * static_cast<double>(m + l));
        out.terms.push_back(std::complex<double>(lanes.re[l], lanes.im[l]) / z *
                            (m + l == 0 ? 0.5 : 1.0));
      }
    }
    return contours_.emplace(rung, std::move(out)).first->second;
  }

  const LineCode code_;
  CodedDisturbance disturbance_;  // with the noise raised
  double given_sigma_v_ = 0.0;
  double reach_v_ = 0.0;
  double mean_v_ = 0.0;
  double deviation_v_ = 0.0;
  std::optional<CodedGrid> grid_;
  std::optional<Moments> moments_;
  std::map<int, double> k_;
  std::map<int, Contour> contours_;
};

CodedTail::CodedTail(const LineCode& code, CodedDisturbance disturbance)
    : ladder_(std::make_unique<Ladder>(code, std::move(disturbance))) {}
CodedTail::CodedTail(CodedTail&&) noexcept = default;
CodedTail& CodedTail::operator=(CodedTail&&) noexcept = default;
CodedTail::~CodedTail() = default;

double CodedTail::exceeded_level_v(double probability) {
  check_probability(probability);
  const double quantile = gaussian_quantile_of_tail(probability);
  if (ladder_->only_noise()) return ladder_->given_sigma_v() * quantile;
  if (ladder_->grid()) return ladder_->grid()->exceeded_level_v(probability);
  const double log_inverse = -std::log(probability);
  // The Chernoff bound: N <= (K + ln(1/P)) / theta for every theta, least at the saddle point.
  const Contour& contour =
      ladder_->best(quantile / ladder_->deviation_v(),
                    [&](double theta, double k) { return (k + log_inverse) / theta; });
  const auto excess = [&](double x) { return contour.log_exceedance(x) + log_inverse; };
  const double high = (contour.k + log_inverse) / contour.theta;
  double low = high - 3.0 / contour.theta;
  for (int i = 0; i < 60 && excess(low) < 0.0; ++i) low -= ladder_->deviation_v();
  std::uintmax_t rounds = 60;
  const auto [a, b] = boost::math::tools::toms748_solve(
      excess, low, high, boost::math::tools::eps_tolerance<double>(40), rounds);
  const double level_v = 0.5 * (a + b);
  if (!ladder_->has_more_noise()) return level_v;
  return std::min(level_v - ladder_->correction_v(contour.theta),
                  ladder_->worst_v() + quantile * ladder_->given_sigma_v());
}

double CodedTail::exceedance(double level_v) {
  if (ladder_->only_noise()) {
    return ladder_->given_sigma_v() > 0.0 ? gaussian_tail(level_v / ladder_->given_sigma_v())
                                          : (level_v < 0.0 ? 1.0 : 0.0);
  }
  if (ladder_->grid()) return ladder_->grid()->exceedance(level_v);
  const double out = (level_v - ladder_->mean_v()) / ladder_->deviation_v();
  const Contour& contour =
      ladder_->best(std::max(out, 0.5) / ladder_->deviation_v(),
                    [&](double theta, double k) { return k - theta * level_v - std::log(theta); });
  const double log_p = contour.log_exceedance(level_v + ladder_->correction_v(contour.theta));
  return log_p < 0.0 ? std::exp(log_p) : (out < 0.0 ? 1.0 : 0.0);
}

double exceeded_level_v(const LineCode& code, const CodedDisturbance& disturbance,
                        double probability) {
  return CodedTail(code, disturbance).exceeded_level_v(probability);
}

double exceedance(const LineCode& code, const CodedDisturbance& disturbance, double level_v) {
  return CodedTail(code, disturbance).exceedance(level_v);
}

CodedMoments coded_moments(const LineCode& code, const Eigen::VectorXd& row,
                           Eigen::Index main_index) {
  check({row, main_index, {}});
  const Eigen::Index n = row.size();
  const Eigen::Index pad = code.max_symbols();
  const Eigen::Index main_in_order = n - 1 - main_index;
  Eigen::VectorXd weight = Eigen::VectorXd::Zero(n + 2 * pad);
  weight.segment(pad, n) = row.reverse();
  weight[pad + main_in_order] = 0.0;
  // Of the paths into a state: their probability, and the sums of X and X^2 weighted with it.
  struct State {
    double probability = 0.0;
    double first = 0.0;
    double second = 0.0;
  };
  State total;
  std::vector<State> state;
  std::vector<State> next;
  Eigen::VectorXd sums;
  for (const Path& path : paths_of(code, n, main_in_order)) {
    if (path.upward) continue;  // the main symbol is free: one direction says all
    state.clear();
    for (const double p : code.state_probability(path.blocks.front().section)) {
      state.push_back({p, 0.0, 0.0});
    }
    for (const Block& block : path.blocks) {
      const LineCode::Section& section = code.sections()[block.section];
      sums.noalias() =
          section.words.transpose() * weight.segment(pad + block.at, section.num_symbols());
      next.assign(static_cast<std::size_t>(section.num_to), {});
      for (const LineCode::Branch& branch : section.branches) {
        double probability = 0.0;
        double first = 0.0;
        double second = 0.0;
        for (int w = branch.first; w < branch.last; ++w) {
          const double p = section.probability[static_cast<std::size_t>(w)];
          probability += p;
          first += p * sums[w];
          second += p * sums[w] * sums[w];
        }
        const State& from = state[static_cast<std::size_t>(branch.from)];
        State& to = next[static_cast<std::size_t>(branch.to)];
        to.probability += from.probability * probability;
        to.first += from.first * probability + from.probability * first;
        to.second +=
            from.second * probability + 2.0 * from.first * first + from.probability * second;
      }
      std::swap(state, next);
    }
    for (const State& s : state) {
      total.probability += s.probability;
      total.first += s.first;
      total.second += s.second;
    }
  }
  const double mean = total.first / total.probability;
  return {mean, std::sqrt(std::max(0.0, total.second / total.probability - mean * mean))};
}

// --- the grid
// -------------------------------------------------------------------------------------

namespace {

/// Mass on bins low ... high of an array; outside it is zero.
struct Masses {
  Eigen::VectorXd mass;
  Eigen::Index low = 0;
  Eigen::Index high = -1;
};

// to += factor * from, moved by `shift` bins, a part of a bin split between its neighbours.
void add_moved(Masses& to, const Masses& from, double shift, double factor) {
  if (from.high < from.low) return;
  const double below = std::floor(shift);
  const auto whole = static_cast<Eigen::Index>(below);
  const double part = shift - below;
  const Eigen::Index n = from.high - from.low + 1;
  const auto source = from.mass.segment(from.low, n);
  to.mass.segment(from.low + whole, n) += factor * (1.0 - part) * source;
  if (part > 0.0) to.mass.segment(from.low + whole + 1, n) += factor * part * source;
  const Eigen::Index low = from.low + whole;
  const Eigen::Index high = from.high + whole + (part > 0.0 ? 1 : 0);
  to.low = to.high < to.low ? low : std::min(to.low, low);
  to.high = std::max(to.high, high);
}

}  // namespace

CodedGrid coded_grid(const LineCode& code, const CodedDisturbance& disturbance, double step_v) {
  check(disturbance);
  const Disturbance& others = disturbance.others;
  const Eigen::Index n = disturbance.row.size();
  const Eigen::Index splits = 2 * n + others.symbols_v.size() + others.binary_v.size() + 4;
  const double half = reach_v(disturbance) / step_v + static_cast<double>(splits);
  if (!(step_v > 0.0 && half < (1 << 23))) {
    throw std::invalid_argument("coded_grid: a step of " + std::to_string(step_v) +
                                " V makes no grid of at most 2^24 bins");
  }
  CodedGrid grid;
  grid.step_v = step_v;
  grid.sigma_v = others.sigma_v;
  grid.zero_index = static_cast<Eigen::Index>(std::ceil(half));
  const Eigen::Index size = 2 * grid.zero_index + 1;

  const Eigen::Index pad = code.max_symbols();
  const Eigen::Index main_in_order = n - 1 - disturbance.main_index;
  Eigen::VectorXd weight = Eigen::VectorXd::Zero(n + 2 * pad);
  weight.segment(pad, n) = -disturbance.row.reverse() / step_v;
  weight[pad + main_in_order] = 0.0;

  Masses all{Eigen::VectorXd::Zero(size), 0, -1};
  for (const Path& path : paths_of(code, n, main_in_order)) {
    std::vector<Masses> state;
    for (const double probability : code.state_probability(path.blocks.front().section)) {
      state.push_back({Eigen::VectorXd::Zero(size), grid.zero_index, grid.zero_index});
      state.back().mass[grid.zero_index] = probability;
    }
    for (const Block& block : path.blocks) {
      const LineCode::Section& section = code.sections()[block.section];
      std::vector<Masses> next(static_cast<std::size_t>(section.num_to),
                               Masses{Eigen::VectorXd::Zero(size), 0, -1});
      const Eigen::VectorXd sums = (path.upward ? -1.0 : 1.0) * section.words.transpose() *
                                   weight.segment(pad + block.at, section.num_symbols());
      for (const LineCode::Branch& branch : section.branches) {
        for (int w = branch.first; w < branch.last; ++w) {
          const double probability = section.probability[static_cast<std::size_t>(w)];
          if (probability <= 0.0) continue;
          if (block.main_offset >= 0 &&
              !can_be_pushed(section.words(block.main_offset, w), path.upward)) {
            continue;
          }
          add_moved(next[static_cast<std::size_t>(branch.to)],
                    state[static_cast<std::size_t>(branch.from)], sums[w], probability);
        }
      }
      state = std::move(next);
    }
    for (const Masses& masses : state) add_moved(all, masses, 0.0, 1.0);
  }
  const auto spread = [&](double amplitude_v, int levels) {
    Masses next{Eigen::VectorXd::Zero(size), 0, -1};
    for (int l = 0; l < levels; ++l) {
      add_moved(next, all, amplitude_v / step_v * (2.0 * l / (levels - 1) - 1.0), 1.0 / levels);
    }
    all = std::move(next);
  };
  for (const double b : others.symbols_v) spread(b, others.levels);
  for (const double b : others.binary_v) spread(b, 2);
  grid.mass = all.mass / all.mass.sum();
  return grid;
}

double CodedGrid::exceedance(double level_v) const {
  double sum = 0.0;
  for (Eigen::Index i = mass.size(); i-- > 0;) {
    if (mass[i] <= 0.0) continue;
    const double above = static_cast<double>(i - zero_index) * step_v - level_v;
    sum += mass[i] * (sigma_v > 0.0 ? gaussian_tail(-above / sigma_v) : (above > 0.0 ? 1.0 : 0.0));
  }
  return sum;
}

double CodedGrid::exceeded_level_v(double probability) const {
  check_probability(probability);
  double low = -static_cast<double>(zero_index) * step_v;
  double high = -low + sigma_v * gaussian_quantile_of_tail(probability);
  low -= 40.0 * sigma_v;
  // Bisection: without noise the tail is a staircase.
  for (int i = 0; i < 60; ++i) {
    const double middle = 0.5 * (low + high);
    (exceedance(middle) > probability ? low : high) = middle;
  }
  return high;
}

}  // namespace tapwright
