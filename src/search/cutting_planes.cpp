#include "search/cutting_planes.hpp"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <utility>

namespace tapwright::search {
namespace {

// Rows have coefficients of order 1, so these are a few thousand units of rounding.
constexpr double kViolation = 1e-13;
constexpr double kPivot = 1e-11;
constexpr double kEmptyBy = 1e-10;

std::size_t at(int i) { return static_cast<std::size_t>(i); }

}  // namespace

CuttingPlanes::CuttingPlanes(int dim)
    : dim_(dim),
      lo_(at(dim)),
      hi_(at(dim)),
      active_(at(dim + 1), 0),
      inverse_(at((dim + 1) * (dim + 1))),
      multipliers_(at(dim + 1)),
      x_(at(dim + 1)),
      alpha_(at(dim + 1)) {}

void CuttingPlanes::clear() {
  num_rows_ = 0;
  rows_.clear();
}

void CuttingPlanes::set_box(std::span<const double> lo, std::span<const double> hi) {
  std::copy(lo.begin(), lo.end(), lo_.begin());
  std::copy(hi.begin(), hi.end(), hi_.begin());
}

int CuttingPlanes::add(std::span<const double> g, double t_coefficient, double r, double sign) {
  assert(static_cast<int>(g.size()) == dim_);
  for (const double value : g) rows_.push_back(sign * value);
  rows_.push_back(t_coefficient);
  rows_.push_back(r);
  return num_rows_++;
}

int CuttingPlanes::add_cut(std::span<const double> a, double b) { return add(a, 1.0, b, -1.0); }
int CuttingPlanes::add_row(std::span<const double> g, double r) { return add(g, 0.0, r, 1.0); }

void CuttingPlanes::start_from_cut(int cut) {
  const double* row = rows_.data() + row_at(cut);
  const int m = dim_ + 1;
  // Active: the box side that the cut's gradient leads to, for each variable; and the cut.
  std::fill(inverse_.begin(), inverse_.end(), 0.0);
  for (int i = 0; i < dim_; ++i) {
    const double slope = -row[i];
    const bool upper = slope >= 0.0;
    active_[at(i)] = upper ? dim_ + i : i;
    multipliers_[at(i)] = std::abs(slope);
    inverse_[at(i * m + i)] = upper ? 1.0 : -1.0;
    inverse_[at(i * m + dim_)] = std::abs(slope);
  }
  active_[at(dim_)] = 2 * dim_ + cut;
  multipliers_[at(dim_)] = 1.0;
  inverse_[at(dim_ * m + dim_)] = 1.0;
  recompute_vertex();
}

bool CuttingPlanes::start_from(const Basis& basis) {
  active_ = basis;
  if (!invert()) return false;
  recompute_vertex();
  return true;
}

double CuttingPlanes::right_side(int id) const {
  if (id < dim_) return -lo_[at(id)];
  if (id < 2 * dim_) return hi_[at(id - dim_)];
  return rows_[row_at(id - 2 * dim_) + at(dim_ + 1)];
}

void CuttingPlanes::recompute_vertex() {
  const int m = dim_ + 1;
  std::fill(x_.begin(), x_.end(), 0.0);
  for (int j = 0; j < m; ++j) {
    const double r = right_side(active_[at(j)]);
    const double* column = inverse_.data() + at(j * m);
    for (int i = 0; i < m; ++i) x_[at(i)] += r * column[i];
  }
}

/// Gauss-Jordan with row pivoting on the active rows; also sets the multipliers.
bool CuttingPlanes::invert() {
  const int m = dim_ + 1;
  std::vector<double> a(at(m * m), 0.0);
  std::vector<double> inverse(at(m * m), 0.0);
  for (int j = 0; j < m; ++j) {
    const int id = active_[at(j)];
    double* row = a.data() + at(j * m);
    if (id < dim_) {
      row[id] = -1.0;
    } else if (id < 2 * dim_) {
      row[id - dim_] = 1.0;
    } else {
      std::copy_n(rows_.data() + row_at(id - 2 * dim_), m, row);
    }
    inverse[at(j * m + j)] = 1.0;
  }
  for (int p = 0; p < m; ++p) {
    int best = p;
    for (int i = p + 1; i < m; ++i) {
      if (std::abs(a[at(i * m + p)]) > std::abs(a[at(best * m + p)])) best = i;
    }
    if (std::abs(a[at(best * m + p)]) < kPivot) return false;
    for (int k = 0; best != p && k < m; ++k) {
      std::swap(a[at(best * m + k)], a[at(p * m + k)]);
      std::swap(inverse[at(best * m + k)], inverse[at(p * m + k)]);
    }
    const double scale = 1.0 / a[at(p * m + p)];
    for (int k = 0; k < m; ++k) {
      a[at(p * m + k)] *= scale;
      inverse[at(p * m + k)] *= scale;
    }
    for (int i = 0; i < m; ++i) {
      const double factor = a[at(i * m + p)];
      if (i == p || factor == 0.0) continue;
      for (int k = 0; k < m; ++k) {
        a[at(i * m + k)] -= factor * a[at(p * m + k)];
        inverse[at(i * m + k)] -= factor * inverse[at(p * m + k)];
      }
    }
  }
  for (int j = 0; j < m; ++j) {
    for (int i = 0; i < m; ++i) inverse_[at(j * m + i)] = inverse[at(i * m + j)];
    // The objective is t; rounding may leave a multiplier of -1e-17.
    multipliers_[at(j)] = std::max(0.0, inverse_[at(j * m + dim_)]);
  }
  return true;
}

CuttingPlanes::Status CuttingPlanes::solve() {
  const int m = dim_ + 1;
  const int most_violated_until = 20 + 10 * m;  // then the lowest number, which can't cycle
  const int give_up_after = 40 * m + most_violated_until;
  for (int pivots = 0;; ++pivots) {
    const bool by_number = pivots > most_violated_until;
    double violation = kViolation;
    int entering = -1;
    const auto offer = [&](int id, double amount) {
      if (amount > violation && (entering < 0 || !by_number)) {
        entering = id;
        violation = amount;
      }
    };
    for (int i = 0; i < dim_; ++i) {
      offer(i, lo_[at(i)] - x_[at(i)]);
      offer(dim_ + i, x_[at(i)] - hi_[at(i)]);
    }
    const double* row = rows_.data();
    for (int r = 0; r < num_rows_; ++r, row += m + 1) {
      double sum = -row[m];
      for (int i = 0; i < m; ++i) sum += row[i] * x_[at(i)];
      offer(2 * dim_ + r, sum);
    }
    if (entering < 0) return Status::kSolved;
    if (pivots == give_up_after) return Status::kStalled;

    // The entering row as a combination of the active ones.
    for (int j = 0; j < m; ++j) {
      const double* column = inverse_.data() + at(j * m);
      double sum = 0.0;
      if (entering < dim_) {
        sum = -column[entering];
      } else if (entering < 2 * dim_) {
        sum = column[entering - dim_];
      } else {
        const double* g = rows_.data() + row_at(entering - 2 * dim_);
        for (int i = 0; i < m; ++i) sum += g[i] * column[i];
      }
      alpha_[at(j)] = sum;
    }
    int leaving = -1;
    double ratio = 0.0;
    for (int j = 0; j < m; ++j) {
      if (alpha_[at(j)] <= kPivot) continue;
      const double candidate = multipliers_[at(j)] / alpha_[at(j)];
      const bool tie_to_prefer =
          leaving >= 0 && candidate == ratio &&
          (by_number ? active_[at(j)] < active_[at(leaving)] : alpha_[at(j)] > alpha_[at(leaving)]);
      if (leaving < 0 || candidate < ratio || tie_to_prefer) {
        leaving = j;
        ratio = candidate;
      }
    }
    if (leaving < 0) {
      if (violation < kEmptyBy) return Status::kSolved;  // rounding on rows that just touch
      entering_ = entering;
      return Status::kEmpty;
    }

    double* pivot_column = inverse_.data() + at(leaving * m);
    const double scale = 1.0 / alpha_[at(leaving)];
    const double step = violation * scale;
    for (int i = 0; i < m; ++i) x_[at(i)] -= step * pivot_column[i];
    for (int i = 0; i < m; ++i) pivot_column[i] *= scale;
    for (int j = 0; j < m; ++j) {
      if (j == leaving) continue;
      double* column = inverse_.data() + at(j * m);
      const double factor = alpha_[at(j)];
      for (int i = 0; i < m; ++i) column[i] -= factor * pivot_column[i];
      multipliers_[at(j)] = std::max(0.0, multipliers_[at(j)] - ratio * factor);
    }
    multipliers_[at(leaving)] = ratio;
    active_[at(leaving)] = entering;
    if (pivots % 32 == 31) {  // rounding has piled up
      if (invert()) recompute_vertex();
    }
  }
}

double CuttingPlanes::multiplier(int row) const {
  for (int j = 0; j <= dim_; ++j) {
    if (active_[at(j)] == 2 * dim_ + row) return multipliers_[at(j)];
  }
  return 0.0;
}

double CuttingPlanes::contradiction(int row) const {
  if (entering_ == 2 * dim_ + row) return 1.0;
  for (int j = 0; j <= dim_; ++j) {
    if (active_[at(j)] == 2 * dim_ + row) return std::max(0.0, -alpha_[at(j)]);
  }
  return 0.0;
}

}  // namespace tapwright::search
