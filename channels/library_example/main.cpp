// How far a link reaches: the best eye for one value after another of any key of its link file.
//
//   margin LINK KEY VALUE...
//   margin channels/camera_2m.json "channel.cascade[3].line.length_m" 1 2 3 4 5

#include <cstdio>

#include "tapwright/eye/eye_model.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/search/solve.hpp"

int main(int argc, char** argv) {
  if (argc < 4) {
    std::fputs("margin LINK KEY VALUE...\n", stderr);
    return 2;
  }
  for (int i = 3; i < argc; ++i) {
    // A key is changed before the link is checked, as if it stood in the file.
    const tapwright::Result<tapwright::Link> link =
        tapwright::read_link(argv[1], {{argv[2], argv[i]}});
    for (const tapwright::Diagnostic& note : link.notes) {
      std::fprintf(stderr, "%s\n", tapwright::to_string(note).c_str());
    }
    if (!link) return 2;

    // A model holds every pulse; a solution the settings, what they are worth and how sure that is.
    const tapwright::EyeModel model = tapwright::prepare(*link.value);
    const tapwright::Solution best = tapwright::solve(model);
    std::printf("%10s   eye height %7.2f mV   %s\n", argv[i],
                1e3 * best.score.height.worst_case_v,
                best.proof.kind == tapwright::Proof::Kind::kProven ? "proven" : "not proven");
  }
  return 0;
}
