#include "search/cell_search.hpp"

#include <algorithm>
#include <cmath>
#include <memory>

#include "search/worst_case_cell.hpp"


namespace tapwright::search {
namespace {

constexpr double kTie = 1e-12;        // volts: the step of height_key
constexpr int kNumSeedStates = 3;     // states searched for a first good setting
constexpr int kNumSeedPhases = 4;
constexpr int kBatch = 16;            // open cells that share one incumbent: no matter how many threads

/// A cell that its root relaxation left open.
struct OpenCell {
  std::size_t state = 0;
  Eigen::Index phase_samples = 0;
  double bound_v = 0.0;
  std::vector<double> x;
};

/// How a cell was closed, for the certificate.
struct ClosedCell {
  Eigen::Index phase_samples = 0;
  std::vector<std::vector<TreeNode>> trees;
};

struct Placed {
  std::size_t state = 0;
  Eigen::Index phase_samples = 0;
  Found found;
};

/// The best of all cells, ties kept.
class GlobalBest {
 public:
  void offer(std::size_t state, Eigen::Index phase_samples, const Best& best) {
    constexpr std::size_t kMaxPlaces = 64;
    for (const Found& found : best.ties()) {
      const int order = places_.empty() ? 1 : compare(found, places_.front().found);
      if (order > 0) places_.clear();
      if (order >= 0 && places_.size() < kMaxPlaces) places_.push_back({state, phase_samples, found});
    }
  }
  [[nodiscard]] double height_v() const {
    return places_.empty() ? kImpossible : places_.front().found.height_v;
  }
  [[nodiscard]] const std::vector<Placed>& places() const { return places_; }

 private:
  std::vector<Placed> places_;
};

class Search {
 public:
  Search(const EyeModel& model, const CellSource& source, const SearchOptions& options,
         const RunControl& control)
      : model_(model),
        source_(source),
        options_(options),
        control_(control),
        space_(*source.space),
        phases_(search_phases(model)) {
    if (options.max_seconds) {
      deadline_ = std::chrono::steady_clock::now() +
                  std::chrono::duration_cast<std::chrono::steady_clock::duration>(
                      std::chrono::duration<double>(*options.max_seconds));
    }
  }

  SearchResult run() {
    closed_.resize(source_.num_states);
    seed();
    step("relaxation, rounded", std::numeric_limits<double>::infinity());
    scan_all();
    double bound_v = best_.height_v();
    for (const OpenCell& cell : open_) bound_v = std::max(bound_v, cell.bound_v);
    step("every sampling instant bounded", bound_v);
    search_open();
    result_.height_v = best_.height_v();
    result_.bound_v = std::max(best_.height_v(), open_bound_v_);
    result_.proven = open_bound_v_ == kImpossible;
    result_.num_cells = static_cast<std::int64_t>(source_.num_states * phases_.size());
    step("branch and bound", result_.bound_v);
    collect();
    return std::move(result_);
  }

 private:
  [[nodiscard]] bool out_of_time() const {
    return control_.stopped() || (deadline_ && std::chrono::steady_clock::now() > *deadline_);
  }

  [[nodiscard]] std::vector<double> middle() const {
    std::vector<double> x;
    for (const Knob& knob : source_.make(0)->knobs()) x.push_back(0.5 * (knob.lo + knob.hi));
    return x;
  }

  /// The relaxation over all roots of the cell's present place; x of the best root.
  double relax_roots(Cell& cell, Relaxer& relaxer, double stop_below_v,
                     std::vector<double>& x, std::vector<std::vector<TreeNode>>* trees) {
    double bound_v = kImpossible;
    std::vector<double> best_x;
    for (const Box& root : cell.roots()) {
      relaxer.reset(root, x);
      const Relaxation relaxation = relaxer.relax(root, stop_below_v);
      if (trees != nullptr) {
        const bool empty = relaxation.status == Relaxation::Status::kEmpty;
        trees->push_back({{empty ? TreeNode::Kind::kEmpty : TreeNode::Kind::kBound, 0, 0,
                           empty ? relaxer.contradiction() : relaxer.multipliers()}});
      }
      if (relaxation.bound_v > bound_v) {
        bound_v = relaxation.bound_v;
        best_x.assign(relaxer.x().begin(), relaxer.x().end());
      }
    }
    if (!best_x.empty()) x = std::move(best_x);
    return bound_v;
  }

  /// A first good setting: the states whose relaxation at the pulse's peak is best, over all
  /// phases, rounded and moved.
  void seed() {
    std::vector<OpenCell> starts(source_.num_states);
    parallel_for(static_cast<int>(source_.num_states), control_.num_threads, [&](int i) {
      const auto s = static_cast<std::size_t>(i);
      const std::unique_ptr<Cell> cell = source_.make(s);
      Relaxer relaxer(*cell);
      cell->move_to(0);
      starts[s] = {s, 0, 0.0, middle()};
      starts[s].bound_v = relax_roots(*cell, relaxer, kImpossible, starts[s].x, nullptr);
    });
    by_bound(starts);
    for (std::size_t i = 0; i < std::min<std::size_t>(kNumSeedStates, starts.size()); ++i) {
      const std::unique_ptr<Cell> cell = source_.make(starts[i].state);
      Relaxer relaxer(*cell);
      std::vector<OpenCell> cells;
      std::vector<double> x = starts[i].x;
      for (const Eigen::Index phase : phases_) {
        cell->move_to(phase);
        if (cell->quick_bound() < best_.height_v()) continue;
        const double bound_v = relax_roots(*cell, relaxer, best_.height_v(), x, nullptr);
        if (bound_v > best_.height_v()) cells.push_back({starts[i].state, phase, bound_v, x});
      }
      by_bound(cells);
      cells.resize(std::min<std::size_t>(cells.size(), kNumSeedPhases));
      for (const OpenCell& open : cells) {
        cell->move_to(open.phase_samples);
        Best best;
        if (has_codes()) {
          round_and_move(*cell, open.x, best, result_.num_settings);
        } else {
          best.offer(cell->exact(open.x, kImpossible), cell->signal(open.x), open.x);
        }
        best_.offer(open.state, open.phase_samples, best);
      }
    }
  }

  void scan_all() {
    std::vector<std::vector<OpenCell>> open_of(source_.num_states);
    std::vector<std::int64_t> nodes_of(source_.num_states, 0);
    const double incumbent_v = best_.height_v();
    parallel_for(static_cast<int>(source_.num_states), control_.num_threads, [&](int i) {
      const auto s = static_cast<std::size_t>(i);
      const std::unique_ptr<Cell> cell = source_.make(s);
      Relaxer relaxer(*cell);
      std::vector<double> x = middle();
      for (const Eigen::Index phase : phases_) {
        if (out_of_time()) {  // no bound: the cell stays open with all that it could be
          open_of[s].push_back({s, phase, std::numeric_limits<double>::infinity(), x});
          continue;
        }
        cell->move_to(phase);
        std::vector<std::vector<TreeNode>> trees;
        const double quick_v = cell->quick_bound();
        if (quick_v < incumbent_v - kTie) {
          if (options_.certificate) {
            for (std::size_t r = 0; r < cell->roots().size(); ++r) trees.push_back({TreeNode{}});
            closed_[s].push_back({phase, std::move(trees)});
          }
          continue;
        }
        ++nodes_of[s];
        const double bound_v = relax_roots(*cell, relaxer, incumbent_v - kTie, x,
                                           options_.certificate ? &trees : nullptr);
        if (bound_v >= incumbent_v - kTie) {
          open_of[s].push_back({s, phase, bound_v, x});
        } else if (options_.certificate) {
          closed_[s].push_back({phase, std::move(trees)});
        }
      }
      control_.report(static_cast<double>(i) / static_cast<double>(source_.num_states), "bounding");
    });
    for (std::size_t s = 0; s < source_.num_states; ++s) {
      result_.num_nodes += nodes_of[s];
      for (OpenCell& cell : open_of[s]) open_.push_back(std::move(cell));
    }
    by_bound(open_);
  }

  /// Batches share one incumbent, so what happens in a cell doesn't depend on the threads.
  void search_open() {
    for (std::size_t from = 0; from < open_.size(); from += kBatch) {
      const std::size_t count = std::min<std::size_t>(kBatch, open_.size() - from);
      std::vector<TreeResult> results(count);
      const double incumbent_v = best_.height_v();
      const std::int64_t nodes_left = std::max<std::int64_t>(0, source_.max_nodes - num_tree_nodes_);
      parallel_for(static_cast<int>(count), control_.num_threads, [&](int i) {
        const OpenCell& open = open_[from + static_cast<std::size_t>(i)];
        const std::unique_ptr<Cell> cell = source_.make(open.state);
        cell->move_to(open.phase_samples);
        TreeLimits limits{incumbent_v, nodes_left, options_.certificate, &control_, deadline_};
        results[static_cast<std::size_t>(i)] = branch_and_bound(*cell, limits);
      });
      for (std::size_t i = 0; i < count; ++i) {
        const OpenCell& open = open_[from + i];
        TreeResult& tree = results[i];
        num_tree_nodes_ += tree.num_nodes;
        result_.num_nodes += tree.num_nodes;
        result_.num_settings += tree.num_settings;
        best_.offer(open.state, open.phase_samples, tree.best);
        open_bound_v_ = std::max(open_bound_v_, std::min(tree.open_bound_v, open.bound_v));
        if (options_.certificate) {
          closed_[open.state].push_back({open.phase_samples, std::move(tree.trees)});
        }
      }
      control_.report(static_cast<double>(from + count) / static_cast<double>(open_.size()),
                      "searching codes");
    }
    if (open_bound_v_ <= best_.height_v()) open_bound_v_ = kImpossible;
  }

  [[nodiscard]] bool has_codes() const {
    const std::unique_ptr<Cell> cell = source_.make(0);
    return std::any_of(cell->knobs().begin(), cell->knobs().end(),
                       [](const Knob& knob) { return !knob.values.empty(); });
  }

  static void by_bound(std::vector<OpenCell>& cells) {
    std::stable_sort(cells.begin(), cells.end(), [](const OpenCell& a, const OpenCell& b) {
      return a.bound_v > b.bound_v;
    });
  }

  void step(const char* stage, double bound_v) {
    result_.trail.push_back({stage, best_.height_v(), bound_v, result_.num_settings});
  }

  void collect() {
    for (const Placed& placed : best_.places()) {
      const std::unique_ptr<Cell> cell = source_.make(placed.state);
      cell->move_to(placed.phase_samples);
      result_.ties.push_back(cell->settings(placed.found.x));
    }
    if (options_.certificate && result_.proven) result_.certificate = certificate();
  }

  [[nodiscard]] Eigen::VectorXd all_taps(const std::vector<double>& x) const {
    std::vector<double> taps(static_cast<std::size_t>(space_.num_taps()));
    space_.expand(x, taps);
    return Eigen::Map<const Eigen::VectorXd>(taps.data(), static_cast<Eigen::Index>(taps.size()));
  }

  void add_nodes(const std::vector<TreeNode>& tree, Certificate& proof,
                 Certificate::Cell& cell) const {
    for (const TreeNode& node : tree) {
      Certificate::Node out;
      out.kind = static_cast<Certificate::Node::Kind>(node.kind);
      out.tap = space_.tap_of(node.knob);
      out.at = node.at + space_.first_code(node.knob);
      if (node.kind == TreeNode::Kind::kBound || node.kind == TreeNode::Kind::kEmpty) {
        Certificate::Multipliers multipliers;
        multipliers.cell = proof.cells.size();
        for (const auto& x : node.multipliers.points) multipliers.points.push_back(all_taps(x));
        for (const auto& x : node.multipliers.row_points) {
          multipliers.input_points.push_back(all_taps(x));
        }
        multipliers.weights = node.multipliers.weights;
        if (!model_.link.crosstalk.empty()) {
          for (const auto& side : node.multipliers.side_points) {
            multipliers.crosstalk_points.emplace_back(Eigen::Map<const Eigen::VectorXd>(
                side.data(), static_cast<Eigen::Index>(side.size())));
          }
        }
        multipliers.input_weights = node.multipliers.row_weights;
        out.multipliers = proof.multipliers.size();
        proof.multipliers.push_back(std::move(multipliers));
      }
      cell.nodes.push_back(out);
    }
  }

  /// The root boxes as one tree: a cut at zero for each straddling knob, then the boxes' own trees.
  void add_trees(const std::vector<int>& straddling, std::size_t depth,
                 std::vector<std::vector<TreeNode>>::const_iterator& tree, Certificate& proof,
                 Certificate::Cell& cell) const {
    if (depth == straddling.size()) {
      add_nodes(*tree++, proof, cell);
      return;
    }
    const int knob = straddling[depth];
    const int first_positive = FirSpace::first_positive(space_.knobs(), knob);
    cell.nodes.push_back({Certificate::Node::Kind::kSplit, space_.tap_of(knob),
                          first_positive < 0 ? -1 : first_positive + space_.first_code(knob), 0});
    add_trees(straddling, depth + 1, tree, proof, cell);
    add_trees(straddling, depth + 1, tree, proof, cell);
  }

  [[nodiscard]] Certificate certificate() const {
    Certificate proof;
    proof.bound_v = result_.bound_v;
    const std::vector<int> straddling = space_.straddling(space_.knobs());
    for (std::size_t s = 0; s < source_.num_states; ++s) {
      for (const ClosedCell& closed : closed_[s]) {
        const Place place = source_.make(s)->place();
        Certificate::Cell cell{place.swing_index, place.ctle_index, closed.phase_samples, {}};
        auto tree = closed.trees.begin();
        add_trees(straddling, 0, tree, proof, cell);
        proof.cells.push_back(std::move(cell));
      }
    }
    return proof;
  }

  const EyeModel& model_;
  const CellSource& source_;
  const SearchOptions& options_;
  const RunControl& control_;
  const FirSpace& space_;
  std::vector<Eigen::Index> phases_;
  std::optional<std::chrono::steady_clock::time_point> deadline_;
  std::vector<OpenCell> open_;
  std::vector<std::vector<ClosedCell>> closed_;
  GlobalBest best_;
  double open_bound_v_ = kImpossible;
  std::int64_t num_tree_nodes_ = 0;
  SearchResult result_;
};

}  // namespace

SearchResult cell_search(const EyeModel& model, const CellSource& source,
                         const SearchOptions& options, const RunControl& control) {
  return Search(model, source, options, control).run();
}

}  // namespace tapwright::search
