#include "search/cell_search.hpp"

#include <algorithm>
#include <cmath>
#include <memory>

#include "search/worst_case_cell.hpp"


namespace tapwright::search {
namespace {

constexpr double kTie = 1e-12;        // volts: the step of height_key
constexpr double kMargin = 0.05;      // of the incumbent: costs a cut, saves relaxations
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

/// How a cell was closed, for the certificate: by trees of its own, or by the signs of another cell
/// of its state (an index in sign_sources_), or by no signs at all.
constexpr int kOwnTrees = -1;
constexpr int kNoSigns = -2;
struct ClosedCell {
  Eigen::Index phase_samples = 0;
  std::vector<std::vector<TreeNode>> trees;  ///< one a root box
  int source = kOwnTrees;
};
struct SignSource {
  Eigen::Index phase_samples = 0;
  Multipliers multipliers;
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
    sign_sources_.resize(source_.num_states);
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

  /// One cell after another of one state, each helping the next.
  struct Walker {
    explicit Walker(std::unique_ptr<Cell> first_cell)
        : cell(std::move(first_cell)), relaxer(*cell), roots(cell->roots()), a(cell->knobs().size()) {
      for (const Knob& knob : cell->knobs()) x.push_back(0.5 * (knob.lo + knob.hi));
    }
    std::unique_ptr<Cell> cell;
    Relaxer relaxer;
    std::vector<Box> roots;
    std::vector<double> x;  ///< of the last relaxation's best root: where the next one starts
    std::vector<double> a;  ///< scratch
    Multipliers multipliers;  ///< of that root
    Signs signs;
  };

  /// The relaxation over all roots at the walker's present place.
  static double relax_roots(Walker& walker, double stop_below_v,
                            std::vector<std::vector<TreeNode>>* trees) {
    double bound_v = kImpossible;
    const std::vector<double> start = walker.x;
    for (const Box& root : walker.roots) {
      Relaxer& relaxer = walker.relaxer;
      relaxer.reset(root, start);
      const Relaxation relaxation = relaxer.relax(root, stop_below_v);
      if (trees != nullptr) {
        const bool empty = relaxation.status == Relaxation::Status::kEmpty;
        trees->push_back({{empty ? TreeNode::Kind::kEmpty : TreeNode::Kind::kBound, 0, 0,
                           empty ? relaxer.contradiction() : relaxer.multipliers()}});
      }
      if (relaxation.bound_v > bound_v) {
        bound_v = relaxation.bound_v;
        walker.x.assign(relaxer.x().begin(), relaxer.x().end());
        if (walker.cell->has_sign_bound()) walker.multipliers = relaxer.multipliers();
      }
    }
    return bound_v;
  }

  /// What the last relaxation's signs say at the walker's present place.
  static double sign_bound(Walker& walker) {
    double bound_v = kImpossible;
    for (const Box& root : walker.roots) {
      bound_v = std::max(bound_v, walker.cell->sign_bound(root, walker.signs, walker.a));
    }
    return bound_v;
  }

  /// A first good setting: the states whose relaxation at the pulse's peak is best, over all
  /// phases, rounded and moved.
  void seed() {
    std::vector<OpenCell> starts(source_.num_states);
    parallel_for(static_cast<int>(source_.num_states), control_.num_threads, [&](int i) {
      const auto s = static_cast<std::size_t>(i);
      Walker walker(source_.make(s));
      walker.cell->move_to(0);
      const double bound_v = relax_roots(walker, kImpossible, nullptr);
      starts[s] = {s, 0, bound_v, walker.x};
    });
    by_bound(starts);
    for (std::size_t i = 0; i < std::min<std::size_t>(kNumSeedStates, starts.size()); ++i) {
      Walker walker(source_.make(starts[i].state));
      Cell* cell = walker.cell.get();
      std::vector<OpenCell> cells;
      walker.x = starts[i].x;
      for (const Eigen::Index phase : phases_) {
        cell->move_to(phase);
        if (cell->quick_bound() < best_.height_v()) continue;
        const double bound_v = relax_roots(walker, best_.height_v(), nullptr);
        if (bound_v > best_.height_v()) {
          cells.push_back({starts[i].state, phase, bound_v, walker.x});
        }
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
      Walker walker(source_.make(s));
      Cell* cell = walker.cell.get();
      const double close_below_v = incumbent_v - kTie;
      // A little lower than needed, so that the signs still serve at the next instants.
      const double relax_to_v = close_below_v - kMargin * std::abs(incumbent_v);
      bool has_signs = false;
      for (const Eigen::Index phase : phases_) {
        if (out_of_time()) {  // no bound: the cell stays open with all that it could be
          open_of[s].push_back({s, phase, std::numeric_limits<double>::infinity(), walker.x});
          continue;
        }
        cell->move_to(phase);
        if (cell->quick_bound() < close_below_v) {
          if (options_.certificate) closed_[s].push_back({phase, {}, kNoSigns});
          continue;
        }
        if (has_signs && sign_bound(walker) < close_below_v) {
          if (options_.certificate) {
            closed_[s].push_back({phase, {}, static_cast<int>(sign_sources_[s].size()) - 1});
          }
          continue;
        }
        ++nodes_of[s];
        std::vector<std::vector<TreeNode>> trees;
        const double bound_v =
            relax_roots(walker, relax_to_v, options_.certificate ? &trees : nullptr);
        if (bound_v >= close_below_v) {
          open_of[s].push_back({s, phase, bound_v, walker.x});
        } else if (options_.certificate) {
          closed_[s].push_back({phase, std::move(trees), kOwnTrees});
        }
        if (bound_v != kImpossible && cell->has_sign_bound()) {
          cell->take_signs(walker.multipliers, walker.signs);
          has_signs = true;
          if (options_.certificate) sign_sources_[s].push_back({phase, walker.multipliers});
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
          closed_[open.state].push_back({open.phase_samples, std::move(tree.trees), kOwnTrees});
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

  std::size_t add_multipliers(const Multipliers& from, std::size_t cell, Certificate& proof) const {
    Certificate::Multipliers multipliers;
    multipliers.cell = cell;
    for (const auto& x : from.points) multipliers.points.push_back(all_taps(x));
    for (const auto& x : from.row_points) multipliers.input_points.push_back(all_taps(x));
    multipliers.weights = from.weights;
    multipliers.input_weights = from.row_weights;
    if (!model_.link.crosstalk.empty()) {
      for (const auto& side : from.side_points) {
        multipliers.crosstalk_points.emplace_back(Eigen::Map<const Eigen::VectorXd>(
            side.data(), static_cast<Eigen::Index>(side.size())));
      }
    }
    proof.multipliers.push_back(std::move(multipliers));
    return proof.multipliers.size() - 1;
  }

  void add_nodes(const std::vector<TreeNode>& tree, Certificate& proof,
                 Certificate::Cell& cell) const {
    for (const TreeNode& node : tree) {
      Certificate::Node out;
      out.kind = static_cast<Certificate::Node::Kind>(node.kind);
      out.tap = space_.tap_of(node.knob);
      out.at = node.at + space_.first_code(node.knob);
      if (node.kind == TreeNode::Kind::kBound || node.kind == TreeNode::Kind::kEmpty) {
        out.multipliers = add_multipliers(node.multipliers, proof.cells.size(), proof);
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

  [[nodiscard]] Certificate certificate() {
    Certificate proof;
    proof.bound_v = result_.bound_v;
    const std::vector<int> straddling = space_.straddling(space_.knobs());
    const std::size_t num_roots = space_.roots(space_.knobs()).size();
    for (std::size_t s = 0; s < source_.num_states; ++s) {
      const std::size_t first_cell = proof.cells.size();
      const auto cell_of = [&](Eigen::Index phase) {
        const auto at = std::find_if(
            closed_[s].begin(), closed_[s].end(),
            [&](const ClosedCell& closed) { return closed.phase_samples == phase; });
        return first_cell + static_cast<std::size_t>(at - closed_[s].begin());
      };
      std::vector<std::size_t> shared;  // what each source's multipliers became
      for (const SignSource& source : sign_sources_[s]) {
        Multipliers signs_alone = source.multipliers;
        signs_alone.row_points.clear();
        signs_alone.row_weights.clear();
        signs_alone.side_points.clear();
        shared.push_back(add_multipliers(signs_alone, cell_of(source.phase_samples), proof));
      }
      const std::size_t no_signs = add_multipliers({}, first_cell, proof);
      const Place place = source_.make(s)->place();
      for (ClosedCell& closed : closed_[s]) {
        Certificate::Cell cell{place.swing_index, place.ctle_index, closed.phase_samples, {}};
        const bool own = closed.source == kOwnTrees;
        if (!own) closed.trees.assign(num_roots, {TreeNode{}});
        auto tree = closed.trees.cbegin();
        const std::size_t before = proof.multipliers.size();
        add_trees(straddling, 0, tree, proof, cell);
        if (!own) {
          proof.multipliers.resize(before);
          for (Certificate::Node& node : cell.nodes) {
            node.multipliers =
                closed.source == kNoSigns ? no_signs : shared[static_cast<std::size_t>(closed.source)];
          }
        }
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
  std::vector<std::vector<SignSource>> sign_sources_;
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
