#pragma once

#include "model/plan.hpp"
#include "model/portfolio.hpp"

#include <cstdint>
#include <optional>
#include <span>

namespace model {

// The plan for a book, found by a rough pass over it: given the systematic factors its loss is
// taken for normal, with the names' conditional mean and deviation.
//
//     mixture     cross-entropy means E[Z | L >= quantile], of the whole tail and, where it is
//                 reached in more than one direction, of clusters of it, beside a defensive
//                 component at 0: de Boer, Kroese, Mannor & Rubinstein (2005), A tutorial on the
//                 cross-entropy method, Annals of Operations Research 134
//     width       of the window, so that it is narrow beside the scale on which the tail falls
//     period      from below the smallest loss to where the tail is negligible
//     large_from  so that cubic cumulants do for what is smaller
Plan find_plan(Cells const& cells, std::span<Stake const> stakes, std::uint64_t seed,
               unsigned threads);

// The same for an inversion on the lattice that all losses are multiples on; nothing where they
// have no unit in common that is coarse enough.
std::optional<Plan> on_lattice(Plan plan, Settings const& settings, std::span<Stake const> stakes);

// Whether a plan, read from wherever, can be worked by at all.
bool is_usable(Plan const& plan, Cells const& cells);

// Whether all losses are multiples of the plan's unit.
bool is_on_lattice(Plan const& plan, std::span<Stake const> stakes);

}  // namespace model
