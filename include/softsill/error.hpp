#pragma once

/// \file error.hpp
/// The one exception type for bad input. Numerical trouble is never an exception: it is a status.

#include <stdexcept>
#include <string>
#include <utility>

namespace softsill {

/// Bad data, a bad file or a bad argument: says which file, where in it, what is wrong and what to
/// do. The program prints what() on one line and ends with exit status 1.
class Error : public std::runtime_error {
 public:
  /// \param file   path as the user gave it; empty where no file is involved
  /// \param place  line, key, data set path or sweep inside the file; may be empty
  /// \param what   what is wrong, a short sentence without full stop
  /// \param remedy what the user can do about it; may be empty
  Error(std::string file, std::string place, std::string what, std::string remedy = {})
      : std::runtime_error(compose(file, place, what, remedy)),
        file_(std::move(file)),
        place_(std::move(place)),
        problem_(std::move(what)),
        remedy_(std::move(remedy)) {}

  const std::string& file() const { return file_; }
  const std::string& place() const { return place_; }
  const std::string& problem() const { return problem_; }
  const std::string& remedy() const { return remedy_; }

 private:
  static std::string compose(const std::string& file, const std::string& place,
                             const std::string& what, const std::string& remedy) {
    std::string text;
    for (const std::string* part : {&file, &place}) {
      if (!part->empty()) {
        text += *part + ": ";
      }
    }
    text += what;
    if (!remedy.empty()) {
      text += "; " + remedy;
    }
    return text;
  }

  std::string file_, place_, problem_, remedy_;
};

/// A broken promise inside softsill: our mistake, never the user's.
class InternalError : public std::logic_error {
 public:
  using std::logic_error::logic_error;
};

}  // namespace softsill
