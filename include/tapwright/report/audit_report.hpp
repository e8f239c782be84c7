#pragma once
// The audit of read-back codes, for people and for scripts.

#include <optional>
#include <string>
#include <vector>

#include "tapwright/study/audit.hpp"
#include "tapwright/study/eye_scan.hpp"

namespace tapwright {

/// Fit of one lane's scan; empty value with the reason when it could not be fitted.
struct LaneFit {
  std::string lane;
  std::optional<ScanFit> fit;
  std::string why_not;
};

struct AuditReport {
  const std::vector<EyeModel>* models = nullptr;  ///< one a lane
  std::string table;                              ///< file of read-back codes
  AuditOptions options;
  Audit audit;
  std::vector<LaneFit> fits;
};

[[nodiscard]] std::string text_of(const AuditReport& report);
/// "format": "tapwright.audit/1"
[[nodiscard]] std::string json_of(const AuditReport& report);
/// One row a lane; a head line with units.
[[nodiscard]] std::string csv_of(const AuditReport& report);
/// lane, field, address, high_bit, low_bit, value: the best setting of each lane as register writes.
[[nodiscard]] std::string register_csv_of(const AuditReport& report);
[[nodiscard]] std::string html_of(const AuditReport& report);

}  // namespace tapwright
