#include "eye/tail_contour.hpp"

#include <algorithm>
#include <cmath>
#include <cstring>
#include <functional>
#include <limits>
#include <numbers>
#include <stdexcept>

namespace tapwright {
namespace {

// ln cosh x = x^2/2 - x^4/12 + x^6/45 - 17 x^8/2520 + 31 x^10/14175 - ...; below this |x| the next
// term (691 x^12 / 935550) is under 6e-8.
constexpr double kSmall = 0.45;
constexpr double kC4 = -1.0 / 12.0;
constexpr double kC6 = 1.0 / 45.0;
constexpr double kC8 = -17.0 / 2520.0;
constexpr double kC10 = 31.0 / 14175.0;
constexpr double kNegligible = 1e-9;
constexpr double kGone = 1e-12;     // a point of a contour, relative to its first
constexpr std::size_t kBlock = 32;  // points handled together

/// sigma^2 z^2 / 2 and sum ln cosh(z b) over the amplitudes from an index on, |z| b < kSmall.
class Series {
 public:
  Series(const Cumulant& cumulant, std::size_t from)
      : sums_(cumulant.power_sums(from)),
        half_p2_(0.5 * (sums_.p2 + cumulant.sigma_v() * cumulant.sigma_v())) {}
  [[nodiscard]] std::complex<double> at(std::complex<double> z) const {
    const std::complex<double> z2 = z * z;
    return z2 * (half_p2_ +
                 z2 * (kC4 * sums_.p4 +
                       z2 * (kC6 * sums_.p6 + z2 * (kC8 * sums_.p8 + z2 * (kC10 * sums_.p10)))));
  }

 private:
  const Cumulant::PowerSums& sums_;
  double half_p2_;
};

using Lanes = double __attribute__((vector_size(16)));

/// cosh(z b) / cosh(theta b) = cos(y b) + i tanh(theta b) sin(y b) of one amplitude along a
/// contour, two points at a time, the angle stepped by rotation within a block.
struct Factor {
  double tanh = 0.0;
  double c1 = 0.0, s1 = 0.0;            // of one step
  double c_block = 0.0, s_block = 0.0;  // of a whole block
  double c = 1.0, s = 0.0;              // at the start of block `next`
  std::size_t next = 0;
  bool ready = false;

  void multiply(double b, double theta, double h, std::size_t block, double* re, double* im) {
    if (!ready) {
      const double e = std::exp(-2.0 * theta * b);
      tanh = (1.0 - e) / (1.0 + e);
      c1 = std::cos(h * b);
      s1 = std::sin(h * b);
      c_block = c1;
      s_block = s1;
      for (std::size_t n = 1; n < kBlock; n *= 2) {
        const double twice = 2.0 * c_block * s_block;
        c_block = (c_block - s_block) * (c_block + s_block);
        s_block = twice;
      }
      ready = true;
    }
    if (next != block) {  // left out of earlier blocks
      const double angle = static_cast<double>(block * kBlock) * h * b;
      c = std::cos(angle);
      s = std::sin(angle);
    }
    const double c2 = (c1 - s1) * (c1 + s1);
    const double s2 = 2.0 * c1 * s1;
    Lanes cs = {c, c * c1 - s * s1};
    Lanes sn = {s, s * c1 + c * s1};
    for (std::size_t j = 0; j < kBlock; j += 2) {
      Lanes x;
      Lanes y;
      std::memcpy(&x, re + j, sizeof x);
      std::memcpy(&y, im + j, sizeof y);
      const Lanes ts = tanh * sn;
      const Lanes x_next = x * cs - y * ts;
      const Lanes y_next = x * ts + y * cs;
      std::memcpy(re + j, &x_next, sizeof x);
      std::memcpy(im + j, &y_next, sizeof y);
      const Lanes c_next = cs * c2 - sn * s2;
      sn = sn * c2 + cs * s2;
      cs = c_next;
    }
    const double c_next = c * c_block - s * s_block;
    s = s * c_block + c * s_block;
    c = c_next;
    next = block + 1;
  }
};

double largest_norm(const double* re, const double* im) {
  double largest = 0.0;
  for (std::size_t j = 0; j < kBlock; ++j) {
    largest = std::max(largest, re[j] * re[j] + im[j] * im[j]);
  }
  return largest;
}

}  // namespace

std::vector<double> binary_amplitudes(const Disturbance& disturbance) {
  std::vector<double> amplitudes;
  const int levels = disturbance.levels;
  if (levels < 2 || (levels & (levels - 1)) != 0) {
    throw std::invalid_argument("Disturbance: the number of levels must be a power of two");
  }
  amplitudes.reserve(static_cast<std::size_t>(disturbance.symbols_v.size() * (levels > 2 ? 2 : 1) +
                                              disturbance.binary_v.size()));
  for (int weight = levels / 2; weight >= 1; weight /= 2) {
    for (const double v : disturbance.symbols_v) amplitudes.push_back(v * weight / (levels - 1.0));
  }
  for (const double v : disturbance.binary_v) amplitudes.push_back(v);
  return amplitudes;
}

ExceededLevel gathered(const Disturbance& disturbance, const std::vector<double>& by_amplitude) {
  ExceededLevel level;
  level.by_symbols = Eigen::VectorXd::Zero(disturbance.symbols_v.size());
  level.by_binary = Eigen::VectorXd::Zero(disturbance.binary_v.size());
  auto next = by_amplitude.begin();
  for (int weight = disturbance.levels / 2; weight >= 1; weight /= 2) {
    for (double& g : level.by_symbols) g += *next++ * weight / (disturbance.levels - 1.0);
  }
  for (double& g : level.by_binary) g = *next++;
  return level;
}

Cumulant::Cumulant(std::vector<double> amplitudes_v, double sigma_v)
    : amplitudes_v_(std::move(amplitudes_v)), sigma_v_(sigma_v) {
  for (double& b : amplitudes_v_) b = std::abs(b);
  std::sort(amplitudes_v_.begin(), amplitudes_v_.end(), std::greater<>());
  // What the transforms' rounding left of a zero is no amplitude.
  while (!amplitudes_v_.empty() && amplitudes_v_.back() <= 1e-14 * amplitudes_v_.front()) {
    amplitudes_v_.pop_back();
  }
  power_sums_.resize(amplitudes_v_.size() + 1);
  for (std::size_t i = amplitudes_v_.size(); i-- > 0;) {
    const double b2 = amplitudes_v_[i] * amplitudes_v_[i];
    const double b4 = b2 * b2;
    const PowerSums& next = power_sums_[i + 1];
    power_sums_[i] = {next.p2 + b2, next.p4 + b4, next.p6 + b4 * b2, next.p8 + b4 * b4,
                      next.p10 + b4 * b4 * b2};
    worst_v_ += amplitudes_v_[i];
  }
}

Cumulant::Cumulant(const Disturbance& disturbance)
    : Cumulant(binary_amplitudes(disturbance), disturbance.sigma_v) {}

std::size_t Cumulant::first_small(double abs_z) const {
  const auto it = std::lower_bound(amplitudes_v_.begin(), amplitudes_v_.end(), kSmall / abs_z,
                                   std::greater<>());
  return static_cast<std::size_t>(it - amplitudes_v_.begin());
}

Cumulant::At Cumulant::at(double theta) const {
  const std::size_t small = first_small(theta);
  const PowerSums& s = power_sums_[small];
  const double t2 = theta * theta;
  const double p2 = s.p2 + sigma_v_ * sigma_v_;
  At at;
  at.k =
      t2 * (p2 / 2 + t2 * (kC4 * s.p4 + t2 * (kC6 * s.p6 + t2 * (kC8 * s.p8 + t2 * kC10 * s.p10))));
  at.k1 =
      theta * (p2 + t2 * (4 * kC4 * s.p4 +
                          t2 * (6 * kC6 * s.p6 + t2 * (8 * kC8 * s.p8 + t2 * 10 * kC10 * s.p10))));
  at.k2 = p2 + t2 * (12 * kC4 * s.p4 +
                     t2 * (30 * kC6 * s.p6 + t2 * (56 * kC8 * s.p8 + t2 * 90 * kC10 * s.p10)));
  double product = 1.0;
  for (std::size_t i = 0; i < small; ++i) {
    const double b = amplitudes_v_[i];
    const double e = std::exp(-2.0 * theta * b);  // ln cosh = theta b + ln((1 + e)/2)
    const double inverse = 1.0 / (1.0 + e);
    const double t = (1.0 - e) * inverse;
    at.k += theta * b;
    at.k1 += b * t;
    at.k2 += b * b * 4.0 * e * inverse * inverse;
    product *= 0.5 * (1.0 + e);
    if (product < 1e-250) {
      at.k += std::log(product);
      product = 1.0;
    }
  }
  at.k += std::log(product);
  return at;
}

namespace {

/// Root of a rising function f (value and slope) on (0, inf): Newton inside a bracket.
template <class Function>
std::optional<double> rising_root(double start, double relative, const Function& f) {
  double lo = 0.0;
  double hi = 0.0;  // 0 = none yet
  double theta = start;
  for (int i = 0; i < 100; ++i) {
    const auto [value, slope] = f(theta);
    if (value < 0.0) {
      lo = theta;
    } else {
      hi = theta;
    }
    double next = slope > 0.0 ? theta - value / slope : 0.0;
    const double top = hi > 0.0 ? hi : 4.0 * theta;
    if (!(next > lo && next < top)) next = hi > 0.0 ? 0.5 * (lo + hi) : 4.0 * theta;
    if (!std::isfinite(next) || next > 1e12 * start) return std::nullopt;
    if (std::abs(next - theta) <= relative * theta) return next;
    theta = next;
  }
  return theta;
}

}  // namespace

std::optional<double> Cumulant::theta_of_quantile(double q) const {
  const double variance = variance_v2();
  if (!(variance > 0.0)) return std::nullopt;
  if (sigma_v_ == 0.0 &&
      static_cast<double>(amplitudes_v_.size()) * std::numbers::ln2 <= 0.5 * q * q) {
    return std::nullopt;
  }
  return rising_root(q / std::sqrt(variance), 1e-4, [&](double theta) {
    const At at_theta = at(theta);
    return std::pair(theta * at_theta.k1 - at_theta.k - 0.5 * q * q, theta * at_theta.k2);
  });
}

std::optional<double> Cumulant::theta_of_level(double x) const {
  const double variance = variance_v2();
  if (!(variance > 0.0) || (sigma_v_ == 0.0 && x >= worst_v_)) return std::nullopt;
  return rising_root(x / variance, 1e-4, [&](double theta) {
    const At at_theta = at(theta);
    return std::pair(at_theta.k1 - x, at_theta.k2);
  });
}

double TailContour::period_for(double theta, const Cumulant::At& at, double probability) {
  return std::max(std::log(1.0 / probability) + 14.0, theta * at.k1 - at.k + 17.0) / theta;
}

std::optional<TailContour> TailContour::along(const Cumulant& cumulant, double theta,
                                              double period_v, int max_points) {
  TailContour contour;
  contour.theta_ = theta;
  contour.step_ = 2.0 * std::numbers::pi / period_v;
  const double h = contour.step_;
  const double sigma2 = cumulant.sigma_v() * cumulant.sigma_v();
  // Nothing but the Gaussian part is sure to have died away for good: equal amplitudes come back.
  const double y_max = std::sqrt(-2.0 * std::log(kNegligible) / sigma2);
  if (!(y_max / h < max_points)) return std::nullopt;
  const std::size_t num_blocks = static_cast<std::size_t>(y_max / h) / kBlock + 1;
  contour.real_.resize(num_blocks * kBlock);
  contour.imag_.resize(num_blocks * kBlock);
  contour.k_ = cumulant.at(theta).k;

  // Amplitudes with theta b > 1 stand nearly still along the line: they come last.
  const std::vector<double>& b = cumulant.amplitudes_v();
  const auto first_mobile = static_cast<std::size_t>(
      std::lower_bound(b.begin(), b.end(), 1.0 / theta, std::greater<>()) - b.begin());
  std::vector<Factor> factors(b.size());
  for (std::size_t block = 0; block < num_blocks; ++block) {
    double* const re = contour.real_.data() + block * kBlock;
    double* const im = contour.imag_.data() + block * kBlock;
    const double y_first = static_cast<double>(block * kBlock) * h;
    // The Gaussian part and the small amplitudes through their power sums ...
    const std::size_t num_large =
        cumulant.first_small(std::hypot(theta, y_first + static_cast<double>(kBlock) * h));
    const Series series(cumulant, num_large);
    const double at_theta = series.at(theta).real();
    for (std::size_t j = 0; j < kBlock; ++j) {
      const std::complex<double> value =
          std::exp(series.at({theta, y_first + static_cast<double>(j) * h}) - at_theta);
      re[j] = value.real();
      im[j] = value.imag();
    }
    // ... then one large one after the other, until nothing is left to be multiplied.
    const auto multiply = [&](std::size_t i) {
      factors[i].multiply(b[i], theta, h, block, re, im);
      return i % 8 != 0 || largest_norm(re, im) > kGone * kGone;
    };
    bool alive = largest_norm(re, im) > kGone * kGone;
    for (std::size_t i = std::min(first_mobile, num_large); alive && i < num_large; ++i) {
      alive = multiply(i);
    }
    for (std::size_t i = std::min(first_mobile, num_large); alive && i-- > 0;) alive = multiply(i);
    if (!alive) {
      std::fill(re, re + kBlock, 0.0);
      std::fill(im, im + kBlock, 0.0);
    }
  }
  std::size_t num_alive = contour.real_.size();
  while (num_alive > kBlock && contour.real_[num_alive - 1] == 0.0 &&
         contour.imag_[num_alive - 1] == 0.0) {
    num_alive -= kBlock;
  }
  contour.real_.resize(num_alive);
  contour.imag_.resize(num_alive);
  contour.real_[0] *= 0.5;  // the trapezoid rule's first point
  contour.imag_[0] *= 0.5;
  return contour;
}

TailContour::Sums TailContour::sums(double x) const {
  // e^(-i y x), stepped by rotation.
  const double c1 = std::cos(step_ * x);
  const double s1 = -std::sin(step_ * x);
  double c = 1.0;
  double s = 0.0;
  Sums sums;
  for (std::size_t j = 0; j < real_.size(); ++j) {
    const double re = real_[j] * c - imag_[j] * s;
    const double im = real_[j] * s + imag_[j] * c;
    const double y = static_cast<double>(j) * step_;
    sums.plain += re;
    sums.over_z += (re * theta_ + im * y) / (theta_ * theta_ + y * y);
    const double c_next = c * c1 - s * s1;
    s = s * c1 + c * s1;
    c = c_next;
  }
  const double scale = step_ / std::numbers::pi * std::exp(k_ - theta_ * x);
  sums.plain *= scale;
  sums.over_z *= scale;
  return sums;
}

double TailContour::exceedance(double x) const { return sums(x).over_z; }
double TailContour::density(double x) const { return sums(x).plain; }

double TailContour::level_of(double probability, double start_v) const {
  // Newton on ln P, inside a bracket as soon as there is one: with little noise P is a staircase.
  double x = start_v;
  double low = -std::numeric_limits<double>::infinity();
  double high = std::numeric_limits<double>::infinity();
  const double largest_step = 6.0 / theta_;
  for (int i = 0; i < 200; ++i) {
    const Sums at = sums(x);
    (at.over_z > probability ? low : high) = x;
    double next = at.over_z > 0.0 && at.plain > 0.0
                      ? x + std::log(at.over_z / probability) * at.over_z / at.plain
                      : x + (at.over_z > probability ? largest_step : -largest_step);
    next = std::clamp(next, x - largest_step, x + largest_step);
    if (!(next > low && next < high)) next = 0.5 * (low + high);
    const double step = next - x;
    x = next;
    if (std::abs(step) < 1e-7 / theta_ || high - low < 1e-7 / theta_) break;
  }
  return x;
}

double TailContour::by_variance(double x) const {
  // d/d sigma^2 of e^(K - z x) / z is z/2 times what the density has.
  double density = 0.0;
  double moment = 0.0;
  for (std::size_t j = 0; j < real_.size(); ++j) {
    const double y = static_cast<double>(j) * step_;
    const double c = std::cos(y * x);
    const double s = std::sin(y * x);
    const double re = real_[j] * c + imag_[j] * s;
    const double im = imag_[j] * c - real_[j] * s;
    density += re;
    moment += re * theta_ - im * y;
  }
  return 0.5 * moment / density;
}

void TailContour::gradient(double x, const std::vector<double>& amplitudes_v, double sigma_v,
                           std::vector<double>& by_amplitude, double& by_sigma) const {
  const std::size_t n = real_.size();
  std::vector<double> re(n);
  std::vector<double> im(n);
  double density = 0.0;
  std::complex<double> moment[5] = {};  // sums of W z, z^3 ... z^9
  for (std::size_t j = 0; j < n; ++j) {
    const double y = static_cast<double>(j) * step_;
    const std::complex<double> w = std::complex(real_[j], imag_[j]) * std::polar(1.0, -y * x);
    re[j] = w.real();
    im[j] = w.imag();
    density += w.real();
    const std::complex<double> z(theta_, y);
    std::complex<double> power = w * z;
    for (auto& m : moment) {
      m += power;
      power *= z * z;
    }
  }
  const double abs_z = std::hypot(theta_, static_cast<double>(n) * step_);
  by_sigma = sigma_v * moment[0].real() / density;
  by_amplitude.resize(amplitudes_v.size());
  for (std::size_t k = 0; k < amplitudes_v.size(); ++k) {
    const double b = amplitudes_v[k];
    double sum = 0.0;
    if (std::abs(b) * abs_z < kSmall) {
      const double b2 = b * b;
      sum =
          b * (moment[0].real() +
               b2 * (4 * kC4 * moment[1].real() +
                     b2 * (6 * kC6 * moment[2].real() +
                           b2 * (8 * kC8 * moment[3].real() + b2 * 10 * kC10 * moment[4].real()))));
    } else {
      // tanh(z b) = (t + i c s (1 - t^2)) / (c^2 + t^2 s^2).
      const double t = std::tanh(theta_ * b);
      const double c1 = std::cos(step_ * b);
      const double s1 = std::sin(step_ * b);
      double c = 1.0;
      double s = 0.0;
      for (std::size_t j = 0; j < n; ++j) {
        sum += (re[j] * t - im[j] * c * s * (1.0 - t * t)) / (c * c + t * t * s * s);
        const double c_next = c * c1 - s * s1;
        s = s * c1 + c * s1;
        c = c_next;
      }
    }
    by_amplitude[k] = sum / density;
  }
}

}  // namespace tapwright
