#pragma once

#include "config/strict.hpp"

#include <string>
#include <string_view>
#include <vector>

namespace tests {

// A file's text in which a ^ stands right before each place where a fault is expected.
struct Marked {
    std::string text;  // without the marks
    std::vector<config::Place> places;
};

inline Marked marked(std::string_view with_marks) {
    Marked result;
    config::Place place{1, 1};
    for (char const c : with_marks) {
        if (c == '^') {
            result.places.push_back(place);
            continue;
        }
        result.text += c;
        place = c == '\n' ? config::Place{place.line + 1, 1}
                          : config::Place{place.line, place.column + 1};
    }
    return result;
}

// The faults as they should read: the first of `what` are of the whole file, where there are more
// of them than marks; the others stand at the marks, in the order of the file.
inline std::vector<std::string> at_marks(std::string const& file, Marked const& marked,
                                         std::vector<std::string> const& what) {
    std::vector<std::string> texts;
    auto const whole = what.size() - marked.places.size();
    for (std::size_t i = 0; i < what.size(); ++i) {
        std::string text = file;
        if (i >= whole) {
            auto const [line, column] = marked.places[i - whole];
            text += ':' + std::to_string(line) + ':' + std::to_string(column);
        }
        texts.push_back(text + ": " + what[i]);
    }
    return texts;
}

}  // namespace tests
