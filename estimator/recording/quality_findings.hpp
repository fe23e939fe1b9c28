#pragma once

// The judgement on the numbers of the quality check.

#include <vector>

#include "softsill/quality.hpp"

namespace softsill {

/// Findings in the order of the topics.
/// \param report complete but for its findings
std::vector<Finding> judge_quality(const Recording& recording, const QualityReport& report);

}  // namespace softsill
