#pragma once

#include <cstddef>
#include <functional>

namespace model {

// Calls work(from, to) for the blocks that [0, count) falls into, in any order, on so many threads;
// 0: all cores.
void in_blocks(std::size_t count, std::size_t block, unsigned threads,
               std::function<void(std::size_t, std::size_t)> const& work);

// Calls work(0), ..., work(count - 1).
void for_each_of(std::size_t count, unsigned threads, std::function<void(std::size_t)> const& work);

}  // namespace model
