#pragma once

/// \file help_text.hpp
/// How help pages look: wrapped within the page, every default in brackets, an example at the end.

#include <CLI/CLI.hpp>
#include <string>

#include "estimator/cli/terminal.hpp"

namespace softsill::cli {

/// CLI11's layout, but descriptions stay beside the option names instead of running off the page
/// and a default stands in brackets where the description ends.
class HelpText : public CLI::Formatter {
 public:
  /// The group of options that every command understands.
  static constexpr const char* everywhere_group = "Everywhere";

  HelpText() {
    column_width(left_column);
    label("Positionals", "Arguments");
  }

  std::string make_description(const CLI::App* app) const override {
    const std::string text = app->get_description();
    return text.empty() ? text : wrap(text) + "\n\n";
  }

  std::string make_usage(const CLI::App* app, std::string name) const override {
    std::string text = "Usage: " + (name.empty() ? app->get_name() : std::move(name));
    if (!app->get_subcommands({}).empty()) {
      return text + " COMMAND [OPTIONS]\n       " + app->get_name() + " COMMAND --help\n";
    }
    for (const CLI::Option* option : app->get_options()) {
      if (option->get_positional()) {
        text += ' ' + option->get_name(true);
      }
    }
    return text + " [OPTIONS]\n";
  }

  std::string make_help(const CLI::App* app, std::string name,
                        CLI::AppFormatMode mode) const override {
    // CLI11 hands down "softsill fit" only where it knows the parent.
    if (app->get_parent() != nullptr) {
      name = app->get_parent()->get_name() + ' ' + app->get_name();
    }
    const std::string commands = make_subcommands(app, mode);
    return make_description(app) + make_usage(app, name) + make_positionals(app) + commands +
           options_by_group(app) + '\n' + make_footer(app);
  }

  std::string make_option_opts(const CLI::Option* option) const override {
    if (option->get_type_size() == 0 || option->get_positional()) {
      return {};
    }
    return ' ' + option->get_type_name();
  }

  std::string make_option(const CLI::Option* option, bool is_positional) const override {
    std::string description = option->get_description();
    if (option->get_type_size() != 0 && !option->get_default_str().empty()) {
      description += " [" + option->get_default_str() + "]";
    }
    return entry(make_option_name(option, is_positional) + make_option_opts(option), description);
  }

  std::string make_subcommand(const CLI::App* app) const override {
    return entry(app->get_name(), first_sentence(app->get_description()));
  }

 private:
  static constexpr std::size_t left_column = 30;

  /// Groups in the order of the command, and at last what works everywhere.
  std::string options_by_group(const CLI::App* app) const {
    std::string text;
    for (const std::string& group : app->get_groups()) {
      std::string entries;
      for (const CLI::Option* option : app->get_options()) {
        if (option->get_group() == group && option->nonpositional() && !everywhere(app, option)) {
          entries += make_option(option, false);
        }
      }
      text += entries.empty() ? "" : "\n" + group + ":\n" + entries;
    }
    text += "\nEverywhere:\n";
    for (const CLI::App* holder : {app, app->get_parent()}) {
      if (holder == nullptr) {
        continue;
      }
      for (const CLI::Option* option : holder->get_options()) {
        const bool shown_already = holder != app && option == holder->get_help_ptr();
        if (everywhere(holder, option) && !shown_already) {
          text += make_option(option, false);
        }
      }
    }
    return text;
  }

  static bool everywhere(const CLI::App* app, const CLI::Option* option) {
    return option == app->get_help_ptr() || option->get_group() == everywhere_group;
  }

  static std::string entry(const std::string& name, const std::string& description) {
    std::string text = "  " + name;
    if (width_of(text) + 2 > left_column) {
      text += '\n' + std::string(left_column, ' ');
    } else {
      text += std::string(left_column - width_of(text), ' ');
    }
    return text + wrap(description, left_column, left_column) + '\n';
  }

  static std::string first_sentence(const std::string& text) {
    const std::size_t end = text.find(". ");
    return end == std::string::npos ? text : text.substr(0, end + 1);
  }
};

}  // namespace softsill::cli
