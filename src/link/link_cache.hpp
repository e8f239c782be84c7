#pragma once
// What a LinkCache holds.

#include <algorithm>
#include <memory>
#include <mutex>
#include <string>
#include <utility>
#include <vector>

#include "tapwright/channel/network.hpp"
#include "tapwright/channel/received_spectrum.hpp"
#include "tapwright/link/link.hpp"
#include "tapwright/link/read_link.hpp"

namespace tapwright {

/// The values used last, by key. May be used by several threads at once.
template <class T>
class Recent {
 public:
  explicit Recent(std::size_t max_size) : max_size_(max_size) {}

  [[nodiscard]] std::shared_ptr<const T> find(const std::string& key) {
    const std::scoped_lock lock(mutex_);
    const auto at =
        std::find_if(kept_.begin(), kept_.end(), [&](const auto& one) { return one.first == key; });
    if (at == kept_.end()) return nullptr;
    std::rotate(kept_.begin(), at, at + 1);  // to the front: used last
    return kept_.front().second;
  }

  void keep(const std::string& key, std::shared_ptr<const T> value) {
    const std::scoped_lock lock(mutex_);
    std::erase_if(kept_, [&](const auto& one) { return one.first == key; });
    kept_.insert(kept_.begin(), {key, std::move(value)});
    if (kept_.size() > max_size_) kept_.pop_back();
  }

 private:
  std::mutex mutex_;
  std::size_t max_size_;
  std::vector<std::pair<std::string, std::shared_ptr<const T>>> kept_;
};

/// A channel's pulse with the files it came from and the notes that came with it.
struct KnownChannel {
  ReceivedSpectrum spectrum;
  std::vector<InputFile> files;
  std::vector<Diagnostic> notes;
};

struct LinkCache::Kept {
  explicit Kept(std::size_t max_records) : networks(max_records), channels(max_records) {}
  Recent<Network> networks;  ///< by digest and name of the file
  Recent<KnownChannel> channels;
};

}  // namespace tapwright
