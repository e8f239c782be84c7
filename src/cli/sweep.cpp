#include <ostream>

#include "cli/link_input.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/report/sweep_report.hpp"
#include "tapwright/study/sweep.hpp"

namespace tapwright::cli {
namespace {

const std::vector<std::string> kOutputs = {"--json", "--csv"};

SweepPart part_from(const Arguments& arguments) {
  const auto text = arguments.text("--part");
  if (!text) return {};
  const std::size_t slash = text->find('/');
  const auto index = parse_integer(text->substr(0, slash));
  const auto count = slash == std::string::npos ? std::nullopt : parse_integer(text->substr(slash + 1));
  if (!index || !count || *index < 1 || *count < *index || *count > 1'000'000) {
    throw BadArgument{"--part: found " + shown_text(*text) +
                      ", wanted I/N with I from 1 to N, such as 2/8"};
  }
  return {*index - 1, *count};
}

/// Everything beside the study that the records depend on.
std::string options_text(const SearchOptions& options) {
  return "max nodes " + std::to_string(options.max_nodes);
}

/// Whether records of `found` may stand beside those of this run; the reason when not.
std::optional<Diagnostic> differs(const RecordHeader& found, const RecordHeader& wanted,
                                  const std::string& path) {
  const auto note = [&](const std::string& what) { return error_at(path, 1, what); };
  if (found.study_sha256 != wanted.study_sha256 || found.num_points != wanted.num_points) {
    return note("holds records of another study, or its files have changed since (study " +
                found.study_sha256.substr(0, 16) + ", this is " + wanted.study_sha256.substr(0, 16) +
                ")");
  }
  if (found.options != wanted.options) {
    return note("was made with " + shown_text(found.options) + ", this run has " +
                shown_text(wanted.options));
  }
  if (found.part.index != wanted.part.index || found.part.count != wanted.part.count) {
    return note("holds part " + std::to_string(found.part.index + 1) + "/" +
                std::to_string(found.part.count) + ", wanted " +
                std::to_string(wanted.part.index + 1) + "/" + std::to_string(wanted.part.count));
  }
  return std::nullopt;
}

Result<RecordHeader> header_of(const RecordFile& file) {
  LineReader lines(file);
  const auto line = lines.next();
  if (!line) return failure<RecordHeader>(error_at(file.path(), 1, "is empty"));
  return header_from(*line, file.path());
}

ExitCode give(const Arguments& arguments, Console& console, const Study& study,
              const SweepRecords& records) {
  using Write = std::optional<Diagnostic> (*)(const Study&, const SweepRecords&, const Sink&);
  for (const auto& [option, write] :
       {std::pair<const char*, Write>{"--json", write_json}, {"--csv", write_csv}}) {
    const auto path = arguments.text(option);
    if (!path) continue;
    const auto fill = [&, writer = write](const Sink& sink) { return writer(study, records, sink); };
    const auto problem = *path == "-" ? fill([&](std::string_view bytes) { console.out << bytes; })
                                      : write_output(*path, fill);
    if (problem) {
      console.tell({*problem});
      return ExitCode::kBadInput;
    }
  }
  SweepSummary summary(study, records.header().plan);
  if (const auto problem = records.for_each([&](const SweepRecord& r) { summary.add(r); })) {
    console.tell({*problem});
    return ExitCode::kBadInput;
  }
  if (!takes_standard_output(arguments, kOutputs)) {
    const Result<std::string> text = text_of(study, records);
    if (!text) {
      console.tell(text.notes);
      return ExitCode::kBadInput;
    }
    console.out << *text.value;
  }
  return summary.met == summary.done ? ExitCode::kOk : ExitCode::kTargetMissed;
}

ExitCode merge(const Arguments& arguments, Console& console, const Study& study,
               const RecordHeader& wanted) {
  const std::vector<std::string> paths = arguments.texts("--merge");
  std::vector<RecordFile> files;
  std::vector<RecordHeader> headers;
  for (const std::string& path : paths) {
    Result<RecordFile> file = RecordFile::open_to_read(path);
    if (file) files.push_back(std::move(*file.value));
    const Result<RecordHeader> header =
        file ? header_of(files.back()) : Result<RecordHeader>{std::nullopt, file.notes};
    if (!header) {
      console.tell(header.notes);
      return ExitCode::kBadInput;
    }
    headers.push_back(*header.value);
  }
  std::vector<const RecordFile*> in_order(paths.size(), nullptr);
  for (std::size_t i = 0; i < paths.size(); ++i) {
    RecordHeader expected = wanted;
    expected.part = {headers[i].part.index, static_cast<std::int64_t>(paths.size())};
    if (const auto problem = differs(headers[i], expected, paths[i])) {
      console.tell({*problem});
      return ExitCode::kBadInput;
    }
    const RecordFile*& place = in_order[static_cast<std::size_t>(headers[i].part.index)];
    if (place != nullptr) {
      console.tell({error_at(paths[i], 1, "is the same part as " + place->path())});
      return ExitCode::kBadInput;
    }
    place = &files[i];
  }
  RecordHeader header = headers.front();
  header.part = {};
  const SweepRecords records(in_order, header);
  const auto state = arguments.text("--state");
  if (state) {
    const auto problem = write_output(*state, [&](const Sink& sink) {
      sink(line_of(header) + "\n");
      return records.for_each([&](const SweepRecord& r) { sink(line_of(r) + "\n"); });
    });
    if (problem) {
      console.tell({*problem});
      return ExitCode::kBadInput;
    }
  }
  return give(arguments, console, study, records);
}

ExitCode run_sweep(const Arguments& arguments, Console& console) {
  RunControl control = run_control(arguments, console);
  SearchOptions options;
  options.compare = false;
  options.max_nodes =
      arguments.integer("--max-nodes", 1, 1'000'000'000'000).value_or(options.max_nodes);
  RecordHeader wanted;
  wanted.part = part_from(arguments);
  wanted.options = options_text(options);
  if (!outputs_can_be_written(arguments, console, {"--json", "--csv", "--state"})) {
    return ExitCode::kBadInput;
  }
  const Result<Study> read = read_study(*arguments.text("STUDY"));
  console.tell(read.notes);
  if (!read) return ExitCode::kBadInput;
  const Study& study = *read.value;
  wanted.study_sha256 = study.sha256;
  wanted.num_points = study.num_points();
  if (arguments.has("--merge")) return merge(arguments, console, study, wanted);

  const auto state = arguments.text("--state");
  Result<RecordFile> file;
  if (state) {
    file = RecordFile::open_to_read(*state);
    if (file && LineReader(*file.value).next()) {
      const Result<RecordHeader> header = header_of(*file.value);
      if (!header) {
        console.tell(header.notes);
        return ExitCode::kBadInput;
      }
      if (const auto problem = differs(*header.value, wanted, *state)) {
        console.tell({*problem});
        return ExitCode::kBadInput;
      }
      wanted.plan = header.value->plan;
    } else {
      file.value.reset();
    }
  }
  if (!file) {
    wanted.plan = plan_sweep(study, options, control);
    if (control.stopped()) {
      console.error("stopped before the first point; nothing was written");
      return ExitCode::kStopped;
    }
  }
  file = state ? RecordFile::open(*state, line_of(wanted)) : RecordFile::temporary(line_of(wanted));
  if (!file) {
    console.tell(file.notes);
    return ExitCode::kBadInput;
  }
  RecordFile& out = *file.value;
  std::int64_t done = -1;
  for (LineReader lines(out); lines.next();) ++done;
  const std::int64_t size = wanted.part.size(wanted.num_points);
  if (done > 0 && done < size && !console.quiet) {
    console.err << "tapwright sweep: " << done << " of " << size << " points are done already\n";
  }
  std::optional<Diagnostic> problem;
  const auto take = [&](const SweepRecord& record) {
    problem = out.append(line_of(record));
    return !problem;
  };
  run_points(study, wanted.plan, wanted.part, done, take, options, control);
  control.report(1.0, "sweep");
  if (!problem) problem = out.sync();
  if (problem) {
    console.tell({*problem});
    return ExitCode::kBadInput;
  }
  const ExitCode code = give(arguments, console, study, SweepRecords({&out}, wanted));
  if (!control.stopped()) return code;
  console.error(state ? "stopped; " + *state + " holds what is done, and the same command goes on"
                      : "stopped; with --state FILE the same command could go on");
  return ExitCode::kStopped;
}

}  // namespace

Command sweep_command() {
  return {"sweep",
          "best codes over many lengths, rates, corners or channels; where to switch between settings",
          "STUDY is a study file (tapwright schema study prints every key): axes over a base link. "
          "Every combination is a point. The answer: each point's best codes, one setting for all "
          "points, the fewest settings along one axis that keep every point at its target, and how "
          "many points meet it. The exit code is 1 when a point misses its target with its own best "
          "setting.\n\n"
          "With --state the points are kept as they are done, each whole; whatever stops the run, the "
          "same command goes on. A run can be divided: --part 1/8 ... --part 8/8, each with a --state "
          "of its own, then --merge with all of them.",
          [] {
            std::vector<OptionRow> rows = {
                {"STUDY", "", "", "study file", false, true},
                {"--state", "FILE", "", "keep finished points here and go on from them"},
                {"--part", "I/N", "1/1", "do every N-th point only, from the I-th on"},
                {"--merge", "FILE", "", "instead of solving, join the --state file of a part; repeat for all parts",
                 true},
                {"--json", "FILE", "", "write everything as JSON (tapwright.sweep/1); - is standard output"},
                {"--csv", "FILE", "", "write one row a point; - is standard output"},
                {"--max-nodes", "N", "50000000",
                 "boxes of FIR codes to look at per point before settling for a bound"},
                threads_row()};
            for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
            return rows;
          }(),
          run_sweep};
}

}  // namespace tapwright::cli
