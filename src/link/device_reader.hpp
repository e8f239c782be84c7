#pragma once
// Transmitter, receiver and register map of a link file, with the checks between their keys.

#include <vector>

#include "link/files.hpp"
#include "link/section.hpp"
#include "tapwright/equalizer/device.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright {

/// Notes go to the section; the result means something only when none of them is an error.
[[nodiscard]] Transmitter read_transmitter(const Section& transmitter);
[[nodiscard]] Receiver read_receiver(const Section& receiver, InputFiles& files);
[[nodiscard]] std::vector<RegisterField> read_registers(const Section& registers,
                                                        const Device& device);

}  // namespace tapwright
