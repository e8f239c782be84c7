#include "search/tree.hpp"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <queue>

namespace tapwright::search {
namespace {

constexpr double kConverged = 2e-13;  // volts: the cutting planes' own tolerance
constexpr double kTie = 1e-12;        // volts: the step of height_key
constexpr int kMaxCutsPerBox = 200;
constexpr std::size_t kMaxTies = 64;
constexpr std::int64_t kMaxTieNodes = 2000;
constexpr double kScanConcave = 6;    // settings: about what one more relaxation costs
constexpr double kScanRough = 64;     // when the bound can't close single settings anyway

std::size_t at(int i) { return static_cast<std::size_t>(i); }

/// Index of the value nearest to `wanted`; the lower of two as near.
int nearest_code(const Knob& knob, double wanted) {
  const auto above = std::lower_bound(knob.values.begin(), knob.values.end(), wanted);
  if (above == knob.values.begin()) return 0;
  if (above == knob.values.end()) return static_cast<int>(knob.values.size()) - 1;
  const auto index = static_cast<int>(above - knob.values.begin());
  return wanted - above[-1] <= *above - wanted ? index - 1 : index;
}

}  // namespace

// --- Best ----------------------------------------------------------------------------------------

int compare(const Found& a, const Found& b) {
  const auto order = [](std::int64_t p, std::int64_t q) { return p < q ? -1 : (p > q ? 1 : 0); };
  const int by_height = order(height_key(a.height_v), height_key(b.height_v));
  if (by_height != 0) return by_height;
  // The ratio (E/2 + N)/N rises with a smaller signal where the eye is open, else with a larger.
  const int by_signal = order(height_key(b.signal_v), height_key(a.signal_v));
  return a.height_v < 0.0 ? -by_signal : by_signal;
}

void Best::offer(double height_v, double signal_v, std::span<const double> x) {
  if (height_v == kImpossible) return;
  Found found{height_v, signal_v, {x.begin(), x.end()}};
  if (!ties_.empty()) {
    const int order = compare(found, ties_.front());
    if (order < 0 || (order == 0 && ties_.size() >= kMaxTies)) return;
    if (order > 0) ties_.clear();
    for (const Found& tie : ties_) {
      if (tie.x == found.x) return;
    }
  }
  ties_.push_back(std::move(found));
}

void Best::merge(const Best& other) {
  for (const Found& found : other.ties_) offer(found.height_v, found.signal_v, found.x);
}

// --- Relaxer -------------------------------------------------------------------------------------

Relaxer::Relaxer(Problem& problem)
    : problem_(&problem),
      planes_(static_cast<int>(problem.knobs().size())),
      a_(problem.knobs().size()),
      point_(problem.knobs().size()) {}

/// The cut that the problem just gave in a_ and b, made at x.
void Relaxer::add_cut(std::span<const double> x, double b) {
  planes_.add_cut(a_, b);
  note_origins(Origin::kCut);
  std::copy(x.begin(), x.end(), points_.end() - static_cast<std::ptrdiff_t>(x.size()));
  std::vector<double> side = problem_->side_point();
  if (!side.empty()) {
    side_points_.resize(origins_.size());
    side_points_.back() = std::move(side);
  }
  cuts_.insert(cuts_.end(), a_.begin(), a_.end());
  cuts_.push_back(b);
  ++num_cuts_;
}

/// Rows that came since the last call: made at point_, or the FIR's own limits.
void Relaxer::note_origins(Origin origin) {
  const std::size_t dim = point_.size();
  while (static_cast<int>(origins_.size()) < planes_.num_rows()) {
    origins_.push_back(origin);
    points_.insert(points_.end(), point_.begin(), point_.end());
  }
  assert(points_.size() == origins_.size() * dim);
  static_cast<void>(dim);
}

std::vector<double> Relaxer::point_of(int row) const {
  const auto dim = static_cast<std::ptrdiff_t>(point_.size());
  const auto from = points_.begin() + row * dim;
  return {from, from + dim};
}

void Relaxer::reset(const Box& root, std::span<const double> start) {
  planes_.clear();
  points_.clear();
  origins_.clear();
  side_points_.clear();
  cuts_.clear();
  planes_.set_box(root.lo, root.hi);
  problem_->add_rows(root, planes_);
  note_origins(Origin::kLimits);
  for (std::size_t i = 0; i < point_.size(); ++i) {
    point_[i] = std::clamp(start[i], root.lo[i], root.hi[i]);
  }
  add_cut(point_, problem_->cut(root, point_, a_));
  planes_.start_from_cut(planes_.num_rows() - 1);
}

Relaxation Relaxer::relax(const Box& box, double stop_below_v, const CuttingPlanes::Basis* basis) {
  planes_.set_box(box.lo, box.hi);
  if (basis != nullptr && !planes_.start_from(*basis)) {
    int first_cut = 0;
    while (!planes_.is_cut(first_cut)) ++first_cut;
    planes_.start_from_cut(first_cut);
  }
  for (int round = 0; round < kMaxCutsPerBox; ++round) {
    const CuttingPlanes::Status status = planes_.solve();
    if (status == CuttingPlanes::Status::kEmpty) return {Relaxation::Status::kEmpty, kImpossible};
    const double t = planes_.t();
    if (t < stop_below_v) return {Relaxation::Status::kClosed, t};
    if (status == CuttingPlanes::Status::kStalled) break;
    std::copy(planes_.x().begin(), planes_.x().end(), point_.begin());
    const auto separated = [&](bool thorough) {
      if (!problem_->separate(box, point_, planes_, thorough)) return false;
      note_origins(thorough ? Origin::kInput : Origin::kLimits);
      return true;
    };
    if (separated(false)) continue;
    const double b = problem_->cut(box, point_, a_);
    double height = b;
    for (std::size_t i = 0; i < a_.size(); ++i) height += a_[i] * point_[i];
    if (t - height > kConverged) {
      add_cut(point_, b);
      continue;
    }
    if (separated(true)) {
      add_cut(point_, problem_->cut(box, point_, a_));
      continue;
    }
    return {Relaxation::Status::kConverged, t};
  }
  return {Relaxation::Status::kLoose, planes_.t()};
}

double Relaxer::bound_at(std::span<const double> x) const {
  double least = std::numeric_limits<double>::infinity();
  for (std::size_t from = 0; from < cuts_.size(); from += x.size() + 1) {
    double value = cuts_[from + x.size()];
    for (std::size_t i = 0; i < x.size(); ++i) value += cuts_[from + i] * x[i];
    least = std::min(least, value);
  }
  return least;
}

Multipliers Relaxer::multipliers() const {
  Multipliers result;
  for (int row = 0; row < planes_.num_rows(); ++row) {
    const double weight = planes_.multiplier(row);
    if (weight <= 0.0) continue;
    if (planes_.is_cut(row)) {
      result.points.push_back(point_of(row));
      const bool has_side = at(row) < side_points_.size();
      result.side_points.push_back(has_side ? side_points_[at(row)] : std::vector<double>());
      result.weights.push_back(weight);
    } else if (origins_[at(row)] == Origin::kInput) {
      result.row_points.push_back(point_of(row));
      result.row_weights.push_back(weight);
    }
  }
  return result;
}

Multipliers Relaxer::contradiction() const {
  Multipliers result;
  for (int row = 0; row < planes_.num_rows(); ++row) {
    const double weight = planes_.contradiction(row);
    if (weight <= 0.0 || origins_[at(row)] != Origin::kInput) continue;
    result.row_points.push_back(point_of(row));
    result.row_weights.push_back(weight);
  }
  return result;
}

// --- the tree ------------------------------------------------------------------------------------

Split choose_split(const std::vector<Knob>& knobs, const Box& box, std::span<const double> x) {
  Split split;
  double most = 1e-9;
  int widest = 0;
  Split on_codes;
  for (int i = 0; i < static_cast<int>(knobs.size()); ++i) {
    const Knob& knob = knobs[at(i)];
    if (knob.values.empty() || box.first[at(i)] == box.last[at(i)]) continue;
    const auto begin = knob.values.begin() + box.first[at(i)];
    const auto end = knob.values.begin() + box.last[at(i)] + 1;
    const auto above = std::upper_bound(begin + 1, end - 1, x[at(i)]);
    const double share = std::clamp((x[at(i)] - above[-1]) / (*above - above[-1]), 0.0, 1.0);
    const int upper = static_cast<int>(above - knob.values.begin());
    const double fraction = std::min(share, 1.0 - share);
    if (fraction > most) {
      most = fraction;
      split = {i, upper};
    }
    const int width = box.last[at(i)] - box.first[at(i)];
    if (width > widest) {
      widest = width;
      on_codes = {i, upper};
    }
  }
  return split.knob >= 0 ? split : on_codes;
}

std::vector<double> rounded(const std::vector<Knob>& knobs, const Box& box,
                            std::span<const double> x) {
  std::vector<double> out(x.begin(), x.end());
  for (std::size_t i = 0; i < out.size(); ++i) {
    if (knobs[i].values.empty()) continue;
    out[i] = knobs[i].values[at(
        std::clamp(nearest_code(knobs[i], x[i]), box.first[i], box.last[i]))];
  }
  return out;
}

namespace {

class Tree {
 public:
  Tree(Problem& problem, const TreeLimits& limits)
      : problem_(problem), limits_(limits), knobs_(problem.knobs()), relaxer_(problem) {
    for (const Knob& knob : knobs_) can_scan_ = can_scan_ && !knob.inner;
  }

  TreeResult run() {
    std::vector<double> start;
    for (const Knob& knob : knobs_) start.push_back(0.5 * (knob.lo + knob.hi));
    for (const Box& root : problem_.roots()) search(root, start);
    return std::move(result_);
  }

 private:
  struct Node {
    Box box;
    double bound_v = std::numeric_limits<double>::infinity();
    CuttingPlanes::Basis basis;
    std::int64_t number = 0;
    int record = -1;
  };
  struct Record {
    TreeNode node;
    int lower = -1;
    int upper = -1;
  };
  struct Later {
    bool operator()(const Node& a, const Node& b) const {
      return a.bound_v != b.bound_v ? a.bound_v < b.bound_v : a.number > b.number;
    }
  };

  /// Boxes whose bound is below this are closed; ties are looked at for a while.
  [[nodiscard]] double closing_height() const {
    const double best = std::max(limits_.incumbent_v, result_.best.height_v());
    return num_tie_nodes_ < kMaxTieNodes ? best - kTie : best + kTie;
  }

  [[nodiscard]] bool out_of_budget() const {
    if (result_.num_nodes >= limits_.max_nodes) return true;
    if (result_.num_nodes % 64 != 0) return false;
    if (limits_.control != nullptr && limits_.control->stopped()) return true;
    return limits_.deadline && std::chrono::steady_clock::now() > *limits_.deadline;
  }

  void search(const Box& root, std::vector<double>& start) {
    relaxer_.reset(root, start);
    records_.clear();
    std::priority_queue<Node, std::vector<Node>, Later> open;
    open.push({root, std::numeric_limits<double>::infinity(), relaxer_.basis(), 0, new_record()});
    while (!open.empty()) {
      Node node = open.top();
      open.pop();
      // A box is relaxed once more if the incumbent rose since: its certificate must close it.
      if (out_of_budget()) {
        result_.open_bound_v = std::max(result_.open_bound_v, node.bound_v);
        continue;
      }
      ++result_.num_nodes;
      const double settings = node.box.num_settings(knobs_);
      if (can_scan_ && settings > 0.0 &&
          settings <= (problem_.exact_is_concave() ? kScanConcave : kScanRough)) {
        scan(node.box);
        set_kind(node, TreeNode::Kind::kScored);
        continue;
      }
      const Relaxation relaxation = relaxer_.relax(node.box, closing_height(), &node.basis);
      if (relaxation.status == Relaxation::Status::kEmpty) {
        set_kind(node, TreeNode::Kind::kEmpty);
        continue;
      }
      if (relaxation.status == Relaxation::Status::kClosed) {
        set_kind(node, TreeNode::Kind::kBound);
        continue;
      }
      start.assign(relaxer_.x().begin(), relaxer_.x().end());
      if (node.number == 0) {
        round_and_move(problem_, start, result_.best, result_.num_settings);
      } else {
        offer_rounded(node.box, start);
      }
      const double best = std::max(limits_.incumbent_v, result_.best.height_v());
      if (relaxation.bound_v <= best + kTie && relaxation.bound_v >= best - kTie) ++num_tie_nodes_;
      const Split split = choose_split(knobs_, node.box, start);
      if (split.knob < 0) {
        finish_leaf(node, relaxation, start);
        continue;
      }
      if (relaxation.bound_v < closing_height()) {  // rounding found something better
        set_kind(node, TreeNode::Kind::kBound);
        continue;
      }
      branch(open, node, split, relaxation.bound_v);
    }
    if (limits_.certificate) {
      result_.trees.emplace_back();
      emit(0, result_.trees.back());
    }
  }

  void offer_rounded(const Box& box, const std::vector<double>& x) {
    for (const Knob& knob : knobs_) {
      if (knob.values.empty() && !knob.inner) return;  // leaves know the best real value
    }
    const std::vector<double> trial = rounded(knobs_, box, x);
    ++result_.num_settings;
    const double worth = std::max(limits_.incumbent_v, result_.best.height_v()) - kTie;
    const double height = problem_.exact(trial, worth);
    if (height >= worth) result_.best.offer(height, problem_.signal(trial), trial);
  }

  /// Every coded knob stands at one code: the relaxation is over real knobs alone, or over none.
  void finish_leaf(const Node& node, const Relaxation& relaxation, std::vector<double> x) {
    for (std::size_t i = 0; i < x.size(); ++i) {
      if (!knobs_[i].values.empty()) x[i] = node.box.lo[i];
    }
    ++result_.num_settings;
    const double height = problem_.exact(x, kImpossible);
    result_.best.offer(height, problem_.signal(x), x);
    const bool no_real_knobs = node.box.num_settings(knobs_) > 0.0;
    if (no_real_knobs) {
      set_kind(node, TreeNode::Kind::kScored);
      if (!problem_.exact_is_all() && relaxation.bound_v > result_.best.height_v()) {
        result_.open_bound_v = std::max(result_.open_bound_v, relaxation.bound_v);
      }
      return;
    }
    set_kind(node, TreeNode::Kind::kBound);
    const double best = std::max(limits_.incumbent_v, result_.best.height_v());
    // Real knobs: the relaxation's optimum is the best setting, to its own tolerance.
    const double tolerance = 1e-9 * std::max(std::abs(best), 1e-3);
    if (relaxation.bound_v > best + tolerance) {
      result_.open_bound_v = std::max(result_.open_bound_v, relaxation.bound_v);
    }
  }

  void scan(const Box& box) {
    std::vector<int> code = box.first;
    std::vector<double> x(knobs_.size());
    for (;;) {
      for (std::size_t i = 0; i < x.size(); ++i) x[i] = knobs_[i].values[at(code[i])];
      const double worth = std::max(limits_.incumbent_v, result_.best.height_v()) - kTie;
      if (relaxer_.bound_at(x) >= worth) {
        ++result_.num_settings;
        const double height = problem_.exact(x, worth);
        if (height >= worth) result_.best.offer(height, problem_.signal(x), x);
      }
      std::size_t i = 0;
      while (i < code.size() && ++code[i] > box.last[i]) {
        code[i] = box.first[i];
        ++i;
      }
      if (i == code.size()) return;
    }
  }

  void branch(std::priority_queue<Node, std::vector<Node>, Later>& open, const Node& node,
              const Split& split, double bound_v) {
    int lower_record = -1;
    int upper_record = -1;
    if (limits_.certificate) {
      lower_record = new_record();
      upper_record = new_record();
      Record& record = records_[at(node.record)];
      record.node.kind = TreeNode::Kind::kSplit;
      record.node.knob = split.knob;
      record.node.at = split.at;
      record.lower = lower_record;
      record.upper = upper_record;
    }
    const auto knob = at(split.knob);
    Node lower{node.box, bound_v, relaxer_.basis(), ++last_number_, lower_record};
    lower.box.set_codes(knobs_, knob, node.box.first[knob], split.at - 1);
    Node upper{node.box, bound_v, relaxer_.basis(), ++last_number_, upper_record};
    upper.box.set_codes(knobs_, knob, split.at, node.box.last[knob]);
    open.push(std::move(lower));
    open.push(std::move(upper));
  }

  int new_record() {
    if (!limits_.certificate) return -1;
    records_.emplace_back();
    return static_cast<int>(records_.size()) - 1;
  }

  void set_kind(const Node& node, TreeNode::Kind kind) {
    if (node.record < 0) return;
    TreeNode& record = records_[at(node.record)].node;
    record.kind = kind;
    if (kind == TreeNode::Kind::kBound) record.multipliers = relaxer_.multipliers();
    if (kind == TreeNode::Kind::kEmpty) record.multipliers = relaxer_.contradiction();
  }

  void emit(int record, std::vector<TreeNode>& out) const {
    out.push_back(records_[at(record)].node);
    if (out.back().kind != TreeNode::Kind::kSplit) return;
    emit(records_[at(record)].lower, out);
    emit(records_[at(record)].upper, out);
  }

  Problem& problem_;
  const TreeLimits& limits_;
  const std::vector<Knob>& knobs_;
  Relaxer relaxer_;
  TreeResult result_;
  std::vector<Record> records_;
  bool can_scan_ = true;  ///< the cuts say something about settings without inner knobs
  std::int64_t num_tie_nodes_ = 0;
  std::int64_t last_number_ = 0;
};

}  // namespace

TreeResult branch_and_bound(Problem& problem, const TreeLimits& limits) {
  return Tree(problem, limits).run();
}

void round_and_move(Problem& problem, std::span<const double> x, Best& best,
                    std::int64_t& num_settings) {
  const std::vector<Knob>& knobs = problem.knobs();
  std::vector<int> code(knobs.size(), 0);
  std::vector<int> coded;
  std::vector<double> value(x.begin(), x.end());
  const auto set = [&](int i, int to) {
    code[at(i)] = to;
    value[at(i)] = knobs[at(i)].values[at(to)];
  };
  for (int i = 0; i < static_cast<int>(knobs.size()); ++i) {
    if (knobs[at(i)].values.empty()) continue;
    coded.push_back(i);
    set(i, nearest_code(knobs[at(i)], x[at(i)]));
  }
  const auto score = [&](double worth) {
    ++num_settings;
    return problem.exact(value, worth);
  };
  double height = score(kImpossible);
  // Over a limit: towards zero one knob at a time, the largest rounding first.
  for (std::size_t tries = 0; height == kImpossible && tries < 2 * coded.size(); ++tries) {
    int worst = -1;
    double most = 0.0;
    for (const int i : coded) {
      const double excess = std::abs(value[at(i)]) - std::abs(x[at(i)]);
      const int inward = value[at(i)] > 0.0 ? code[at(i)] - 1 : code[at(i)] + 1;
      if (excess > most && inward >= 0 && inward < static_cast<int>(knobs[at(i)].values.size()) &&
          std::abs(knobs[at(i)].values[at(inward)]) < std::abs(value[at(i)])) {
        most = excess;
        worst = i;
      }
    }
    if (worst < 0) break;
    set(worst, value[at(worst)] > 0.0 ? code[at(worst)] - 1 : code[at(worst)] + 1);
    height = score(kImpossible);
  }
  if (height == kImpossible) return;

  const auto moved = [&](int i, int by) {
    const int to = code[at(i)] + by;
    return to >= 0 && to < static_cast<int>(knobs[at(i)].values.size());
  };
  for (bool improved = true; improved;) {
    improved = false;
    int best_i = -1, best_j = -1, best_by_i = 0, best_by_j = 0;
    double best_height = height + kTie;
    const auto attempt = [&](int i, int by_i, int j, int by_j) {
      if (!moved(i, by_i) || (j >= 0 && !moved(j, by_j))) return;
      const int old_i = code[at(i)];
      const int old_j = j >= 0 ? code[at(j)] : 0;
      set(i, old_i + by_i);
      if (j >= 0) set(j, old_j + by_j);
      const double candidate = score(best_height);
      if (candidate > best_height) {
        best_height = candidate;
        best_i = i, best_j = j, best_by_i = by_i, best_by_j = by_j;
      }
      set(i, old_i);
      if (j >= 0) set(j, old_j);
    };
    for (const int i : coded) {
      for (const int by_i : {-1, 1}) {
        attempt(i, by_i, -1, 0);
        for (const int j : coded) {
          if (j <= i) continue;
          attempt(i, by_i, j, -1);
          attempt(i, by_i, j, 1);
        }
      }
    }
    if (best_i >= 0) {
      set(best_i, code[at(best_i)] + best_by_i);
      if (best_j >= 0) set(best_j, code[at(best_j)] + best_by_j);
      height = best_height;
      improved = true;
    }
  }
  best.offer(height, problem.signal(value), value);
}

}  // namespace tapwright::search
