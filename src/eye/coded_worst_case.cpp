#include "tapwright/eye/coded_worst_case.hpp"

#include <algorithm>
#include <cassert>
#include <limits>
#include <stdexcept>
#include <string>

namespace tapwright {
namespace {

constexpr double kNever = -std::numeric_limits<double>::infinity();

// sum[key] = weight . word for every key of the section: by doubling where keys are bits.
void sum_words(const LineCode::Section& section, const double* weight, double* sum) {
  const int n = section.num_symbols();
  if (section.by_bits) {
    sum[0] = 0.0;
    for (int i = 0; i < n; ++i) sum[0] -= weight[i];
    for (int i = 0; i < n; ++i) {
      const int half = 1 << i;
      for (int b = 0; b < half; ++b) sum[half + b] = sum[b] + 2.0 * weight[i];
    }
    return;
  }
  for (Eigen::Index w = 0; w < section.words.cols(); ++w) {
    sum[w] = section.words.col(w).dot(Eigen::Map<const Eigen::VectorXd>(weight, n));
  }
}

// Strikes out the words whose symbol `offset` can't be pushed further in that direction.
void strike_out(const LineCode::Section& section, int offset, bool upward, double* sum) {
  const double end = upward ? 1.0 : -1.0;
  for (Eigen::Index w = 0; w < section.words.cols(); ++w) {
    if (section.words(offset, w) == end) sum[section.key[static_cast<std::size_t>(w)]] = kNever;
  }
}

}  // namespace

CodedIsi::CodedIsi(LineCode code, Eigen::Index num_cursors, std::optional<Eigen::Index> main_index)
    : code_(std::move(code)),
      num_cursors_(num_cursors),
      main_in_order_(main_index ? num_cursors - 1 - *main_index : -1) {
  if (num_cursors < 1 || (main_index && (*main_index < 0 || *main_index >= num_cursors))) {
    throw std::invalid_argument(
        "CodedIsi: main_index = " + (main_index ? std::to_string(*main_index) : "none") +
        ", but it must be in 0 ... num_cursors - 1 = " + std::to_string(num_cursors - 1));
  }
  const auto states = static_cast<std::size_t>(code_.max_states());
  weight_.assign(static_cast<std::size_t>(num_cursors + 2 * code_.period()), 0.0);
  sum_.resize(static_cast<std::size_t>(code_.max_keys()));
  value_.resize(states);
  next_.resize(states);
  cut_.signs.resize(num_cursors);
}

void CodedIsi::load(const Eigen::Ref<const Eigen::VectorXd>& row, bool upward) {
  if (row.size() != num_cursors_) {
    throw std::invalid_argument("CodedIsi: the row has " + std::to_string(row.size()) +
                                " cursors, but work was set up for " +
                                std::to_string(num_cursors_));
  }
  double* const weight = weight_.data() + code_.period();
  for (Eigen::Index i = 0; i < num_cursors_; ++i) {
    const double r = row[num_cursors_ - 1 - i];
    weight[i] = upward ? r : -r;
  }
  if (main_in_order_ >= 0) weight[main_in_order_] = 0.0;
}

template <bool kTrack>
double CodedIsi::longest_path(int position, bool upward) {
  const int period = code_.period();
  const auto first = static_cast<int>(((position - main_in_order_) % period + period) % period);
  // A sequence to be sent is made of whole characters; for its worth whole sections are enough.
  LineCode::Place place = code_.place(first);
  if constexpr (kTrack) place = {0, first};
  const Eigen::Index end =
      kTrack ? (num_cursors_ + first + period - 1) / period * period - first : num_cursors_;
  auto s = static_cast<std::size_t>(place.section);
  const auto& sections = code_.sections();
  std::fill_n(value_.begin(), sections[s].num_from, 0.0);
  const double* const weight = weight_.data() + period;
  [[maybe_unused]] Choice* choice = choice_.data();  // of this block; there is room when tracking
  int num_states = 0;
  for (Eigen::Index at = -place.offset; at < end;) {
    const LineCode::Section& section = sections[s];
    sum_words(section, weight + at, sum_.data());
    if (main_in_order_ >= at && main_in_order_ < at + section.num_symbols()) {
      strike_out(section, static_cast<int>(main_in_order_ - at), upward, sum_.data());
    }
    num_states = section.num_to;
    std::fill_n(next_.begin(), num_states, kNever);
    for (const LineCode::Branch& branch : section.branches) {
      const int* const key = section.key.data();
      double best = kNever;
      int word = -1;
      for (int i = branch.first; i < branch.last; ++i) {
        const double sum = sum_[static_cast<std::size_t>(key[i])];
        if constexpr (kTrack) {
          if (sum > best) word = i;
        }
        best = std::max(best, sum);
      }
      const double path = value_[static_cast<std::size_t>(branch.from)] + best;
      double& to = next_[static_cast<std::size_t>(branch.to)];
      if constexpr (kTrack) {
        if (path > to) choice[branch.to] = {branch.from, word};
      }
      to = std::max(to, path);
    }
    std::swap(value_, next_);
    at += section.num_symbols();
    if constexpr (kTrack) choice += code_.max_states();
    s = s + 1 == sections.size() ? 0 : s + 1;
  }
  const double most = *std::max_element(value_.begin(), value_.begin() + num_states);
  if constexpr (kTrack) trace_back(first, position, upward);
  return most;
}

// Back along the choices of a path through whole characters, from the last block to the first;
// `first` symbols of the first character lie before the row.
void CodedIsi::trace_back(Eigen::Index first, int position, bool upward) {
  const Eigen::Index period = code_.period();
  const auto& sections = code_.sections();
  const Eigen::Index num_characters = (num_cursors_ + first + period - 1) / period;
  auto block = static_cast<std::size_t>(num_characters) * sections.size();
  auto state = static_cast<int>(
      std::max_element(value_.begin(), value_.begin() + sections[0].num_from) - value_.begin());
  cut_.sequence.resize(num_characters * period);
  Eigen::Index at = cut_.sequence.size();
  while (block-- > 0) {
    const LineCode::Section& section = sections[block % sections.size()];
    const Choice& chosen = choice_[block * static_cast<std::size_t>(code_.max_states()) +
                                   static_cast<std::size_t>(state)];
    assert(chosen.word >= 0);
    at -= section.num_symbols();
    cut_.sequence.segment(at, section.num_symbols()) = section.words.col(chosen.word);
    state = chosen.from;
  }
  cut_.signs = (upward ? 1.0 : -1.0) * cut_.sequence.segment(first, num_cursors_).reverse();
  if (main_in_order_ >= 0) cut_.signs[num_cursors_ - 1 - main_in_order_] = 0.0;
  cut_.main_at = first + main_in_order_;
  cut_.position = position;
  cut_.upward = upward;
}

double CodedIsi::worst_at(const Eigen::Ref<const Eigen::VectorXd>& row, int position, bool upward) {
  if (position < 0 || position >= code_.period()) {
    throw std::invalid_argument("CodedIsi: position = " + std::to_string(position) +
                                ", but it must be in 0 ... " + std::to_string(code_.period() - 1));
  }
  load(row, upward);
  return longest_path<false>(position, upward);
}

double CodedIsi::worst(const Eigen::Ref<const Eigen::VectorXd>& row) {
  double best = kNever;
  for (const bool upward : {false, true}) {
    if (upward && code_.symmetric()) break;
    load(row, upward);
    for (int p = 0; p < code_.period(); ++p) {
      best = std::max(best, longest_path<false>(p, upward));
    }
  }
  return best;
}

const CodeCut& CodedIsi::cut(const Eigen::Ref<const Eigen::VectorXd>& row) {
  double best = kNever;
  int position = 0;
  bool direction = false;
  for (const bool upward : {false, true}) {
    if (upward && code_.symmetric()) break;
    load(row, upward);
    for (int p = 0; p < code_.period(); ++p) {
      const double isi = longest_path<false>(p, upward);
      if (isi > best) {
        best = isi;
        position = p;
        direction = upward;
      }
    }
  }
  // Whole characters reach past the row by less than one on either side.
  choice_.resize(static_cast<std::size_t>(num_cursors_ / code_.period() + 2) *
                 code_.sections().size() * static_cast<std::size_t>(code_.max_states()));
  load(row, direction);
  longest_path<true>(position, direction);
  return cut_;
}

CodedWorstCase coded_worst_case(const LineCode& code, const Eigen::Ref<const Eigen::VectorXd>& row,
                                Eigen::Index main_index) {
  CodedIsi work(code, row.size(), main_index);
  CodedWorstCase out;
  out.by_position_v.resize(code.period(), 2);
  for (int p = 0; p < code.period(); ++p) {
    out.by_position_v(p, 0) = work.worst_at(row, p, false);
    out.by_position_v(p, 1) = work.worst_at(row, p, true);
  }
  out.down_v = out.by_position_v.col(0).maxCoeff();
  out.up_v = out.by_position_v.col(1).maxCoeff();
  out.cut = work.cut(row);
  return out;
}

double coded_peak_v(const LineCode& code, const Eigen::Ref<const Eigen::VectorXd>& row) {
  return CodedIsi(code, row.size(), std::nullopt).worst(row);
}

}  // namespace tapwright
