#pragma once

#include "model/dependence.hpp"
#include "model/figures.hpp"

#include <Eigen/Core>

#include <array>
#include <cstddef>
#include <cstdint>
#include <map>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <utility>
#include <vector>

// The book as the engine sees it: what each name may lose, and the cells of names that share their
// conditional probabilities.

namespace model {

// A name's loss is what it loses by staying in its grade (its base) and a move beyond that:
//
//     default_only   v on default                                              base 0
//     revaluation    EAD (value(from, to) - value(from, from)) to another      base EAD value(from,
//                    grade, v - EAD value(from, from) on default                    from)
//
// Amounts in base currency.
struct Stake {
    std::uint32_t blend = 0;  // its systematic index
    std::uint8_t grade = 0;
    bool takes_part = false;             // not in default, and there is a move it can lose by
    double asset_correlation = 0.0;      // fraction
    double exposure = 0.0;               // revaluation: EAD; else 0
    std::array<double, 3> on_default{};  // E[X], E[X^2], E[X^3] of the move on default
    double base = 0.0;
    double beta_exposure = 0.0;  // EAD where the loss on default is EAD times a beta variable
    double beta_mean = 0.0;      // and that variable's mean
    double largest = 0.0;        // size of the largest move, of a random one its cubic mean

    friend bool operator==(Stake const&, Stake const&) = default;
};

// Names that share grade and asset correlation share the law of their moves given an index.
struct Kind {
    std::uint8_t grade = 0;
    double asset_correlation = 0.0;
    friend auto operator<=>(Kind const&, Kind const&) = default;
};

// A name's kinds, with weights: its own, or four around its asset correlation.
struct Mixed {
    std::array<std::uint32_t, 4> kind{};
    std::array<double, 4> weight{1.0, 0.0, 0.0, 0.0};
    std::size_t count = 1;
};

// The indices and kinds of a book. Where its names have more asset correlations of their own than
// it is worth to have a kind for each, a grade's kinds are nodes, and a name's conditional
// probabilities, and their products, are interpolated from the four around it: piecewise cubic in
// asin(sqrt(rho)), in which they are smooth up to rho = 1.
class Cells {
public:
    Cells() = default;
    Cells(std::span<std::shared_ptr<Name const> const> names, Settings const& settings);

    // Nothing where the book had no such index.
    [[nodiscard]] std::optional<Stake> stake(Name const& name) const;
    [[nodiscard]] bool has_kind(Stake const& stake) const;
    [[nodiscard]] Mixed mixed(Stake const& stake) const;  // has_kind(stake)

    [[nodiscard]] std::vector<Blend> const& blends() const { return blends_; }
    [[nodiscard]] std::vector<Kind> const& kinds() const { return kinds_; }
    // indices x factors: the indices are loadings Z of independent standard normals Z, their
    // principal components, the greatest first. They are the model's, not the book's, so that the
    // same plan means the same for every book.
    [[nodiscard]] Eigen::MatrixXd const& loadings() const { return loadings_; }
    [[nodiscard]] double recovery_precision() const { return recovery_precision_; }
    [[nodiscard]] Settings const& settings() const { return *settings_; }
    [[nodiscard]] Migration const& migration() const { return *migration_; }

private:
    [[nodiscard]] std::optional<std::uint32_t> blend_of(Name const& name) const;

    Settings const* settings_ = nullptr;
    std::shared_ptr<Migration const> migration_;
    std::map<std::string, std::map<std::string, std::uint32_t>> blend_of_codes_;  // sector, country
    std::vector<Blend> blends_;
    std::vector<Kind> kinds_;    // ascending
    std::vector<double> nodes_;  // of asin(sqrt(asset correlation)); empty: a kind for each
    Eigen::MatrixXd loadings_;
    double recovery_precision_ = 0.0;  // a + b of beta recoveries; 0: fixed
};

// What cumulants of a name are made of. A cumulant is a sum of terms
//
//     coefficient(conditional probabilities)  x  amount(stake)
//
// so that over the names of a cell only amounts have to be summed. Three forms of it; p the
// conditional probability of default, A_r = sum over grades of p_j d_j^r, d_j = value(from, j) -
// value(from, from), E the exposure and W_r the moments of the move on default:
//
//     fixed         p W             | p (1 - p) W^2      | p (1 - p) (1 - 2p) W^3
//     beta          p W_1           | p W_2 - p^2 W_1^2  | p W_3 - 3 p^2 W_1 W_2 + 2 p^3 W_1^3
//     revaluation   with m_r = E^r A_r + p W_r:  m_1 | m_2 - m_1^2 | m_3 - 3 m_1 m_2 + 2 m_1^3
enum class Form { fixed, beta, revaluation };
inline constexpr std::size_t terms_max = 13;

Form form_of(Settings const& settings);
std::size_t terms_of(Form form);
// The amounts of a stake, as many as the form has terms.
std::array<double, terms_max> amounts(Form form, Stake const& stake);

}  // namespace model
