#include "search/joint_state.hpp"

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <limits>
#include <queue>
#include <utility>

namespace tapwright::search {
namespace {

constexpr double kTie = 1e-12;
constexpr double kConverged = 2e-13;
constexpr int kMaxRounds = 300;

std::size_t at(int i) { return static_cast<std::size_t>(i); }

std::vector<double> middle(const std::vector<Knob>& knobs) {
  std::vector<double> x;
  for (const Knob& knob : knobs) x.push_back(0.5 * (knob.lo + knob.hi));
  return x;
}

/// The largest height of the cell's boxes, or something below `stop_below_v`; x moves along.
double bound_of(WorstCaseCell& cell, double stop_below_v, std::vector<double>& x) {
  if (cell.quick_bound() < stop_below_v) return kImpossible;
  Relaxer relaxer(cell);
  double bound_v = kImpossible;
  std::vector<double> best_x;
  for (const Box& root : cell.roots()) {
    relaxer.reset(root, x);
    const Relaxation relaxation = relaxer.relax(root, stop_below_v);
    if (relaxation.bound_v > bound_v) {
      bound_v = relaxation.bound_v;
      best_x.assign(relaxer.x().begin(), relaxer.x().end());
    }
  }
  if (!best_x.empty()) x = std::move(best_x);
  return bound_v;
}

}  // namespace

JointState::JointState(std::vector<std::unique_ptr<WorstCaseState>> states,
                       std::vector<std::vector<Eigen::Index>> phases) {
  for (std::size_t m = 0; m < states.size(); ++m) {
    channels_.push_back({std::move(states[m]), std::move(phases[m]), {}});
  }
}

double JointState::glance() {
  double least_v = std::numeric_limits<double>::infinity();
  for (Channel& channel : channels_) {
    WorstCaseCell cell(*channel.state);
    cell.move_to(0);
    std::vector<double> x = middle(cell.knobs());
    least_v = std::min(least_v, bound_of(cell, kImpossible, x));
    ++num_bounded_;
  }
  return least_v;
}

double JointState::scan(double incumbent_v) {
  double least_v = std::numeric_limits<double>::infinity();
  for (Channel& channel : channels_) {
    channel.live.clear();
    double most_v = kImpossible;
    auto cell = std::make_unique<WorstCaseCell>(*channel.state);
    std::vector<double> x = middle(cell->knobs());
    for (const Eigen::Index phase : channel.phases) {
      cell->move_to(phase);
      ++num_bounded_;
      const double bound_v = bound_of(*cell, incumbent_v - kTie, x);
      if (bound_v == kImpossible || bound_v < incumbent_v - kTie) continue;
      most_v = std::max(most_v, bound_v);
      channel.live.push_back({std::move(cell), bound_v, {}});
      cell = std::make_unique<WorstCaseCell>(*channel.state);
    }
    if (channel.live.empty()) return kImpossible;
    std::stable_sort(channel.live.begin(), channel.live.end(),
                     [](const Live& a, const Live& b) { return a.bound_v > b.bound_v; });
    least_v = std::min(least_v, most_v);
  }
  return least_v;
}

double JointState::closing_height() const {
  return std::max(limits_->incumbent_v, result_.best.height_v()) - kTie;
}

double JointState::exact(std::span<const double> x, double worth) {
  double least_v = std::numeric_limits<double>::infinity();
  for (Channel& channel : channels_) {
    double most_v = kImpossible;
    for (Live& live : channel.live) {
      most_v = std::max(most_v, live.cell->exact(x, std::max(worth, most_v)));
      if (most_v >= least_v) break;  // another channel is worse already
    }
    least_v = std::min(least_v, most_v);
    if (least_v == kImpossible || least_v < worth) break;
  }
  return least_v;
}

std::vector<Settings> JointState::settings(std::span<const double> x) {
  std::vector<Settings> all;
  for (Channel& channel : channels_) {
    Found best;
    Live* chosen = nullptr;
    for (Live& live : channel.live) {
      const Found found{live.cell->exact(x, kImpossible), live.cell->signal(x), {}};
      if (chosen == nullptr || compare(found, best) > 0) {
        best = found;
        chosen = &live;
      }
    }
    all.push_back(chosen->cell->settings(x));
  }
  return all;
}

/// Cuts the chosen instant of a channel at x; returns the height that the cut has there.
double JointState::add_cut(std::size_t channel, std::size_t live, const Box& box,
                           std::span<const double> x) {
  Live& one = channels_[channel].live[live];
  std::vector<double> a(x.size());
  const double b = one.cell->cut(box, x, a);
  double height = b;
  for (std::size_t i = 0; i < x.size(); ++i) height += a[i] * x[i];
  one.cuts.insert(one.cuts.end(), a.begin(), a.end());
  one.cuts.push_back(b);
  return height;
}

JointState::Outcome JointState::relax(Node& node, CuttingPlanes& planes, std::vector<double>& x) {
  const std::size_t dim = x.size();
  planes.clear();
  planes.set_box(node.box.lo, node.box.hi);
  WorstCaseCell& any = *channels_.front().live.front().cell;
  any.add_rows(node.box, planes);
  int first_cut = -1;
  const auto add_known = [&](const std::vector<double>& cuts, std::size_t from) {
    for (; from < cuts.size(); from += dim + 1) {
      const int row = planes.add_cut({cuts.data() + from, dim}, cuts[from + dim]);
      if (first_cut < 0) first_cut = row;
    }
  };
  for (std::size_t m = 0; m < channels_.size(); ++m) {
    if (node.chosen[m] < 0) continue;
    Live& live = channels_[m].live[at(node.chosen[m])];
    if (live.cuts.empty()) {
      for (std::size_t i = 0; i < dim; ++i) x[i] = std::clamp(x[i], node.box.lo[i], node.box.hi[i]);
      add_cut(m, at(node.chosen[m]), node.box, x);
    }
    add_known(live.cuts, 0);
  }
  planes.start_from_cut(first_cut);
  for (int round = 0; round < kMaxRounds; ++round) {
    const CuttingPlanes::Status status = planes.solve();
    if (status == CuttingPlanes::Status::kEmpty) return {true, -1};
    const double t = planes.t();
    node.bound_v = std::min(node.bound_v, t);
    if (node.bound_v < closing_height()) return {true, -1};
    if (status == CuttingPlanes::Status::kStalled) return {false, -1};
    std::copy(planes.x().begin(), planes.x().end(), x.begin());
    if (any.separate(node.box, x, planes, false)) continue;
    bool tightened = false;
    for (std::size_t m = 0; m < channels_.size(); ++m) {
      if (node.chosen[m] < 0) continue;
      Live& live = channels_[m].live[at(node.chosen[m])];
      std::size_t before = live.cuts.size();
      if (t - add_cut(m, at(node.chosen[m]), node.box, x) > kConverged) {
        add_known(live.cuts, before);
        tightened = true;
        continue;
      }
      live.cuts.resize(before);
      if (live.cell->separate(node.box, x, planes, true)) {  // crosstalk, the receiver's input
        add_cut(m, at(node.chosen[m]), node.box, x);
        add_known(live.cuts, before);
        tightened = true;
      }
    }
    if (tightened) continue;

    // Which of the others can't follow to this x?
    int worst = -1;
    double least = t - kConverged;
    std::vector<double> a(dim);
    for (std::size_t m = 0; m < channels_.size(); ++m) {
      if (node.chosen[m] >= 0) continue;
      double most = kImpossible;
      for (Live& live : channels_[m].live) {
        double height = live.cell->cut(node.box, x, a);
        for (std::size_t i = 0; i < dim; ++i) height += a[i] * x[i];
        most = std::max(most, height);
        if (most >= t) break;
      }
      if (most < least) {
        least = most;
        worst = static_cast<int>(m);
      }
    }
    return {false, worst};
  }
  return {false, -1};
}

TreeResult JointState::search(const TreeLimits& limits) {
  limits_ = &limits;
  result_ = {};
  const std::vector<Knob>& all = knobs();
  CuttingPlanes planes(static_cast<int>(all.size()));
  std::vector<double> x = middle(all);
  std::int64_t last_number = 0;
  for (const Box& root : channels_.front().live.front().cell->roots()) {
    for (Channel& channel : channels_) {
      for (Live& live : channel.live) live.cuts.clear();
    }
    std::priority_queue<Node, std::vector<Node>, Later> open;
    const auto branch_on = [&](const Node& node, std::size_t m) {
      const Channel& channel = channels_[m];
      for (std::size_t j = 0; j < channel.live.size(); ++j) {
        Node child = node;
        child.chosen[m] = static_cast<int>(j);
        child.bound_v = std::min(node.bound_v, channel.live[j].bound_v);
        child.number = ++last_number;
        if (child.bound_v >= closing_height()) open.push(std::move(child));
      }
    };
    // The channel whose best instant is worst must be among those that bind, or nothing binds.
    std::size_t tightest = 0;
    for (std::size_t m = 1; m < channels_.size(); ++m) {
      if (channels_[m].live.front().bound_v < channels_[tightest].live.front().bound_v) tightest = m;
    }
    branch_on({root, std::numeric_limits<double>::infinity(),
               std::vector<int>(channels_.size(), -1), 0},
              tightest);
    while (!open.empty()) {
      Node node = open.top();
      open.pop();
      if (node.bound_v < closing_height()) continue;
      const bool stopped = limits.control != nullptr && limits.control->stopped();
      const bool late = limits.deadline && std::chrono::steady_clock::now() > *limits.deadline;
      if (result_.num_nodes >= limits.max_nodes || stopped || late) {
        result_.open_bound_v = std::max(result_.open_bound_v, node.bound_v);
        continue;
      }
      ++result_.num_nodes;
      const auto offer = [&](const std::vector<double>& trial) {
        ++result_.num_settings;
        const double height = exact(trial, closing_height());
        if (height >= closing_height()) result_.best.offer(height, 0.0, trial);
      };
      if (node.box.num_settings(all) == 1.0) {  // whatever instants were chosen
        offer(node.box.lo);
        continue;
      }
      const Outcome outcome = relax(node, planes, x);
      if (outcome.closed) continue;
      if (outcome.branch_channel >= 0) {
        branch_on(node, at(outcome.branch_channel));
        continue;
      }
      const Split split = choose_split(all, node.box, x);
      if (split.knob < 0) {
        std::vector<double> leaf = x;
        for (std::size_t i = 0; i < leaf.size(); ++i) {
          if (!all[i].values.empty()) leaf[i] = node.box.lo[i];
        }
        offer(leaf);
        const double best = std::max(limits.incumbent_v, result_.best.height_v());
        const bool real = node.box.num_settings(all) < 0.0;
        if (real && node.bound_v > best + 1e-9 * std::max(std::abs(best), 1e-3)) {
          result_.open_bound_v = std::max(result_.open_bound_v, node.bound_v);
        }
        continue;
      }
      offer(rounded(all, node.box, x));
      if (node.bound_v < closing_height()) continue;
      const auto knob = at(split.knob);
      Node lower = node;
      lower.box.set_codes(all, knob, node.box.first[knob], split.at - 1);
      lower.number = ++last_number;
      Node upper = std::move(node);
      upper.box.set_codes(all, knob, split.at, upper.box.last[knob]);
      upper.number = ++last_number;
      open.push(std::move(lower));
      open.push(std::move(upper));
    }
  }
  limits_ = nullptr;
  return std::move(result_);
}

}  // namespace tapwright::search
