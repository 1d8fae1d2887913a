#pragma once

#include "config/load.hpp"
#include "model/units.hpp"

#include <string>
#include <string_view>

namespace process {

// SHA-256 in lower-case hexadecimal.
std::string sha256(std::string_view text);

// SHA-256 over name length, name, length and bytes of each file, in the order of their names.
std::string digest_of(config::Files const& files);

// 64 hexadecimal digits to the number they spell, and back.
model::Digest digest_from(std::string_view hexadecimal);
std::string hexadecimal(model::Digest const& digest);

}  // namespace process
