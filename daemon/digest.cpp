#include "daemon/digest.hpp"

#include <fmt/format.h>
#include <openssl/evp.h>

#include <array>
#include <charconv>
#include <stdexcept>

namespace process {

std::string sha256(std::string_view text) {
    std::array<unsigned char, 32> bytes{};
    unsigned size = 0;
    if (EVP_Digest(text.data(), text.size(), bytes.data(), &size, EVP_sha256(), nullptr) != 1)
        throw std::runtime_error("SHA-256 is not available");
    return fmt::format("{:02x}", fmt::join(bytes, ""));
}

std::string digest_of(config::Files const& files) {
    std::string text;
    for (auto const& [name, bytes] : files)
        text += fmt::format("{}\n{}\n{}\n{}", name.size(), name, bytes.size(), bytes);
    return sha256(text);
}

model::Digest digest_from(std::string_view hexadecimal) {
    model::Digest digest;
    if (hexadecimal.size() != 64) throw std::invalid_argument("a digest has 64 digits");
    for (std::size_t word = 0; word < 4; ++word) {
        auto const digits = hexadecimal.substr(16 * (3 - word), 16);
        auto const [end, error] =
            std::from_chars(digits.data(), digits.data() + digits.size(), digest.words[word], 16);
        if (error != std::errc{} || end != digits.data() + digits.size())
            throw std::invalid_argument("a digest has hexadecimal digits");
    }
    return digest;
}

std::string hexadecimal(model::Digest const& digest) {
    return fmt::format("{:016x}{:016x}{:016x}{:016x}", digest.words[3], digest.words[2],
                       digest.words[1], digest.words[0]);
}

}  // namespace process
