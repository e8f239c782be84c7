#pragma once
// The largest t under cuts t <= a x + b, rows g x <= r and a box lo <= x <= hi: a dense dual simplex
// for a handful of variables and rows that keep coming.

#include <span>
#include <vector>

namespace tapwright::search {

/// Keeps one vertex: dim + 1 rows that hold with equality, their inverse, and the multipliers that
/// add them up to the objective. The multipliers never turn negative, so `t()` is an upper bound of
/// the optimum at every moment, and adding rows or changing the box keeps them valid.
class CuttingPlanes {
 public:
  enum class Status {
    kSolved,   ///< t() is the optimum
    kEmpty,    ///< no x keeps every row
    kStalled,  ///< too many pivots (degeneracy); t() is still an upper bound
  };
  /// Which rows meet at the vertex; small enough to keep one for each open box of a tree.
  using Basis = std::vector<int>;

  explicit CuttingPlanes(int dim);

  [[nodiscard]] int dim() const { return dim_; }
  /// Forgets all rows.
  void clear();
  void set_box(std::span<const double> lo, std::span<const double> hi);
  /// t <= a x + b. Returns the row's number, which stays the same until clear().
  int add_cut(std::span<const double> a, double b);
  /// g x <= r.
  int add_row(std::span<const double> g, double r);
  /// Starts at the corner of the box that is best under the given cut.
  void start_from_cut(int cut);
  [[nodiscard]] const Basis& basis() const { return active_; }
  /// False if the rows of the basis are singular; then start_from_cut is needed.
  [[nodiscard]] bool start_from(const Basis& basis);
  Status solve();

  [[nodiscard]] double t() const { return x_[static_cast<std::size_t>(dim_)]; }
  [[nodiscard]] std::span<const double> x() const {
    return {x_.data(), static_cast<std::size_t>(dim_)};
  }
  /// Multiplier of a row in the present vertex, 0 if it isn't active. Those of cuts add up to 1.
  [[nodiscard]] double multiplier(int row) const;
  [[nodiscard]] int num_rows() const { return num_rows_; }
  [[nodiscard]] bool is_cut(int row) const { return rows_[row_at(row) + dim_] != 0.0; }
  /// After kEmpty: weights w >= 0 over rows whose sum contradicts the box (a Farkas proof).
  [[nodiscard]] double contradiction(int row) const;

 private:
  [[nodiscard]] std::size_t row_at(int row) const {
    return static_cast<std::size_t>(row) * static_cast<std::size_t>(dim_ + 2);
  }
  [[nodiscard]] double right_side(int id) const;
  void recompute_vertex();
  bool invert();
  int add(std::span<const double> g, double t_coefficient, double r, double sign);

  // Row numbers in active_: 0 ... dim-1 lower bounds, dim ... 2 dim - 1 upper bounds, then rows_.
  int dim_;
  int num_rows_ = 0;
  std::vector<double> rows_;  ///< dim coefficients, the coefficient of t, the right side
  std::vector<double> lo_, hi_;
  std::vector<int> active_;         ///< (dim + 1)
  std::vector<double> inverse_;     ///< column j belongs to active row j; columns are contiguous
  std::vector<double> multipliers_;
  std::vector<double> x_;           ///< x, then t
  std::vector<double> alpha_;
  int entering_ = -1;  ///< the row that found the contradiction
};

}  // namespace tapwright::search
