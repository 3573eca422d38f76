#include "quotes/quote.h"

#include <algorithm>

namespace duskgrid::quotes {

std::int32_t QuoteTable::note_index(const std::string& text) {
  const auto found = std::find(notes.begin(), notes.end(), text);
  const auto index = static_cast<std::int32_t>(found - notes.begin());
  if (found == notes.end()) notes.push_back(text);
  return index;
}

}  // namespace duskgrid::quotes
