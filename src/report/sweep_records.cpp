#include <nlohmann/json.hpp>

#include "report/sweep_json.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/report/sweep_report.hpp"

namespace tapwright {

using Json = nlohmann::ordered_json;

namespace {

constexpr const char* kFormat = "tapwright.sweep_records/1";

std::string text_of(const Json& json) {
  return json.dump(-1, ' ', false, Json::error_handler_t::replace);
}

std::vector<KnobValue> knobs_from(const Json& json) {
  std::vector<KnobValue> knobs;
  for (const auto& [name, value] : json.items()) {
    KnobValue knob{name, value.at(0).get<double>(), {}};
    if (value.size() > 1) knob.code = value.at(1).get<int>();
    knobs.push_back(std::move(knob));
  }
  return knobs;
}

template <class T>
Json or_null(const std::optional<T>& value) {
  return value ? Json(*value) : Json(nullptr);
}

template <class T>
std::optional<T> maybe(const Json& json, const char* key) {
  const Json& value = json.at(key);
  return value.is_null() ? std::nullopt : std::optional(value.get<T>());
}

}  // namespace

Json json_of(const std::vector<KnobValue>& knobs) {
  Json out = Json::object();
  for (const KnobValue& knob : knobs) {
    out[knob.knob] = knob.code ? Json::array({knob.value, *knob.code}) : Json::array({knob.value});
  }
  return out;
}

Json json_of(const SweepRecord& record) {
  Json out = {{"point", record.point}};
  if (!record.problem.empty()) {
    out["problem"] = record.problem;
    return out;
  }
  out["knobs"] = json_of(record.knobs);
  out["eye_mv"] = record.eye_mv;
  out["target_mv"] = record.target_mv;
  out["width_ui"] = or_null(record.width_ui);
  out["met"] = record.met;
  out["proof"] = record.proof;
  out["gap_mv"] = record.gap_mv;
  Json shared = Json::array();
  for (const SweepRecord::Shared& s : record.shared) shared.push_back({s.eye_mv, s.met, s.allowed});
  out["shared"] = std::move(shared);
  return out;
}

std::string line_of(const SweepRecord& record) { return text_of(json_of(record)); }

std::string line_of(const RecordHeader& header) {
  Json shared = Json::array();
  for (const SharedSetting& s : header.plan.shared) {
    shared.push_back({{"origin", s.origin}, {"knobs", json_of(s.knobs)}});
  }
  return text_of({{"format", kFormat},
                  {"version", TAPWRIGHT_VERSION},
                  {"study_sha256", header.study_sha256},
                  {"options", header.options},
                  {"points", header.num_points},
                  {"part", {header.part.index + 1, header.part.count}},
                  {"shared_bound_mv", or_null(header.plan.shared_bound_mv)},
                  {"fewest_settings", or_null(header.plan.fewest_settings)},
                  {"note", header.plan.note},
                  {"shared", shared}});
}

Result<RecordHeader> header_from(const std::string& line, const std::string& file) {
  try {
    const Json json = Json::parse(line);
    const std::string format = json.at("format").get<std::string>();
    const std::string version = json.at("version").get<std::string>();
    if (format != kFormat) {
      return failure<RecordHeader>(error_at(
          file, 1, "found format " + shown_text(format) + ", wanted " + shown_text(kFormat)));
    }
    if (version != TAPWRIGHT_VERSION) {
      return failure<RecordHeader>(
          error_at(file, 1, "was written by version " + shown_text(version) + ", this is " +
                                shown_text(TAPWRIGHT_VERSION)));
    }
    RecordHeader header;
    header.study_sha256 = json.at("study_sha256").get<std::string>();
    header.options = json.at("options").get<std::string>();
    header.num_points = json.at("points").get<std::int64_t>();
    header.part = {json.at("part").at(0).get<std::int64_t>() - 1,
                   json.at("part").at(1).get<std::int64_t>()};
    header.plan.shared_bound_mv = maybe<double>(json, "shared_bound_mv");
    header.plan.fewest_settings = maybe<std::int64_t>(json, "fewest_settings");
    header.plan.note = json.at("note").get<std::string>();
    for (const Json& s : json.at("shared")) {
      header.plan.shared.push_back({knobs_from(s.at("knobs")), s.at("origin").get<std::string>()});
    }
    if (header.num_points < 0 || header.part.count < 1 || header.part.index < 0 ||
        header.part.index >= header.part.count) {
      return failure<RecordHeader>(error_at(file, 1, "points or part make no sense"));
    }
    return {std::move(header), {}};
  } catch (const Json::exception&) {
    return failure<RecordHeader>(error_at(file, 1, "is no first line of a file of sweep records"));
  }
}

Result<SweepRecord> record_from(const std::string& line, const std::string& file,
                                std::int64_t number) {
  const int at = static_cast<int>(std::min<std::int64_t>(number, 2'000'000'000));
  try {
    const Json json = Json::parse(line);
    SweepRecord record;
    record.point = json.at("point").get<std::int64_t>();
    if (json.contains("problem")) {
      record.problem = json.at("problem").get<std::string>();
      return {std::move(record), {}};
    }
    record.knobs = knobs_from(json.at("knobs"));
    record.eye_mv = json.at("eye_mv").get<double>();
    record.target_mv = json.at("target_mv").get<double>();
    record.width_ui = maybe<double>(json, "width_ui");
    record.met = json.at("met").get<bool>();
    record.proof = json.at("proof").get<std::string>();
    record.gap_mv = json.at("gap_mv").get<double>();
    for (const Json& s : json.at("shared")) {
      record.shared.push_back(
          {s.at(0).get<double>(), s.at(1).get<bool>(), s.at(2).get<bool>()});
    }
    return {std::move(record), {}};
  } catch (const Json::exception&) {
    return failure<SweepRecord>(error_at(file, at, "is no record of a sweep"));
  }
}

std::optional<Diagnostic> SweepRecords::for_each(
    const std::function<void(const SweepRecord&)>& take) const {
  std::vector<LineReader> readers;
  for (const RecordFile* file : files_) {
    readers.emplace_back(*file);
    static_cast<void>(readers.back().next());  // the header
  }
  const bool merged = readers.size() > 1;
  std::vector<bool> ended(readers.size(), false);
  std::size_t num_ended = 0;
  for (std::int64_t nth = 0; num_ended < readers.size(); ++nth) {
    const std::size_t f = static_cast<std::size_t>(nth) % readers.size();
    if (ended[f]) continue;
    const auto line = readers[f].next();
    if (!line) {
      ended[f] = true;
      ++num_ended;
      continue;
    }
    const std::string& path = files_[f]->path();
    const Result<SweepRecord> record = record_from(*line, path, readers[f].number());
    if (!record) return record.notes.front();
    const std::int64_t wanted = merged ? nth : header_.part.point(nth);
    if (record.value->point != wanted ||
        (record.value->problem.empty() &&
         record.value->shared.size() != header_.plan.shared.size())) {
      return error_at(path, static_cast<int>(readers[f].number()),
                      "found a record of point " + std::to_string(record.value->point) +
                          ", wanted point " + std::to_string(wanted));
    }
    take(*record.value);
  }
  return std::nullopt;
}

}  // namespace tapwright
