#include "model/parallel.hpp"

#include <oneapi/tbb/global_control.h>
#include <oneapi/tbb/parallel_for.h>
#include <oneapi/tbb/task_arena.h>

#include <algorithm>

namespace model {

void in_blocks(std::size_t count, std::size_t block, unsigned threads,
               std::function<void(std::size_t, std::size_t)> const& work) {
    for_each_of((count + block - 1) / block, threads,
                [&](std::size_t b) { work(b * block, std::min(count, (b + 1) * block)); });
}

void for_each_of(std::size_t count, unsigned threads,
                 std::function<void(std::size_t)> const& work) {
    auto const allowed =
        tbb::global_control::active_value(tbb::global_control::max_allowed_parallelism);
    auto const used = threads == 0 ? allowed : std::min<std::size_t>(threads, allowed);
    tbb::task_arena arena{static_cast<int>(used)};
    arena.execute([&] { tbb::parallel_for(std::size_t{0}, count, work); });
}

}  // namespace model
