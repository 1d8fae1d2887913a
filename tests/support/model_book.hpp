#pragma once

#include "model/book.hpp"
#include "model/settings.hpp"

#include <memory>
#include <span>
#include <string>
#include <vector>

// Books made up in memory, for the tests of the model.

namespace tests {

using Names = std::vector<std::shared_ptr<model::Name const>>;

// One index for all, one grade a default probability given, each of which a name keeps or leaves
// for default; confidence 99.9%.
model::Settings one_index(std::vector<double> const& default_probabilities,
                          double asset_correlation);

// Seven grades, nine sectors, eight countries: an invented lender's model.yaml.
model::Settings lender_settings();

// The same, where a grade better or worse is worth 1% of the exposure for each step, and staying
// earns a little.
model::Settings revalued_lender_settings();

// An invented lender's counterparties over those grades, sectors and countries. A few large, many
// small; each with facilities that lose 45% on default.
Names lender(std::size_t counterparties);

// A counterparty of a grade (by rank) that loses `loss` of `exposure` base currency on default.
std::shared_ptr<model::Name const> name(int rank, double exposure, double loss);

}  // namespace tests
