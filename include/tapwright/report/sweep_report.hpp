#pragma once
// A sweep as records in a file, as text, JSON and CSV.

#include <functional>
#include <string>
#include <vector>

#include "tapwright/report/output_file.hpp"
#include "tapwright/report/record_file.hpp"
#include "tapwright/study/sweep.hpp"

namespace tapwright {

/// What the first line of a file of records says ("format": "tapwright.sweep_records/1").
struct RecordHeader {
  std::string study_sha256;
  std::string options;  ///< whatever else the answer depends on, in words
  std::int64_t num_points = 0;
  SweepPart part;
  SweepPlan plan;
};

[[nodiscard]] std::string line_of(const RecordHeader& header);
[[nodiscard]] std::string line_of(const SweepRecord& record);
/// Errors: a note with file and line, for a line that is no such thing or of another version.
[[nodiscard]] Result<RecordHeader> header_from(const std::string& line, const std::string& file);
[[nodiscard]] Result<SweepRecord> record_from(const std::string& line, const std::string& file,
                                              std::int64_t number);

/// All records of a finished, stopped or divided run, one by one in order of point.
///
/// Errors: a note for a line that can't be read or belongs to another point; `take` has then been
///         called for those before.
class SweepRecords {
 public:
  /// `files` hold one part each, in order of part; they outlive the object.
  SweepRecords(std::vector<const RecordFile*> files, RecordHeader header)
      : files_(std::move(files)), header_(std::move(header)) {}
  [[nodiscard]] const RecordHeader& header() const { return header_; }
  [[nodiscard]] std::optional<Diagnostic> for_each(
      const std::function<void(const SweepRecord&)>& take) const;

 private:
  std::vector<const RecordFile*> files_;
  RecordHeader header_;
};

/// For a pager or a terminal of 80 columns; plain ASCII, no colour. Up to sixty points are listed.
[[nodiscard]] Result<std::string> text_of(const Study& study, const SweepRecords& records);
/// "format": "tapwright.sweep/1": the summary, then a line a point.
[[nodiscard]] std::optional<Diagnostic> write_json(const Study& study, const SweepRecords& records,
                                                   const Sink& sink);
/// One row a point: its place on every axis, its best codes, its eye, and each shared setting's.
[[nodiscard]] std::optional<Diagnostic> write_csv(const Study& study, const SweepRecords& records,
                                                  const Sink& sink);

}  // namespace tapwright
