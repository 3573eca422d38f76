// The words by which configurations and file headers name fields. Not for deciding
// between columns: columns.h, which also declares the table of fields itself.
#pragma once

#include <optional>
#include <string>
#include <string_view>
#include <utility>

#include "quotes/columns.h"

namespace duskgrid::quotes {

// A field, and in a call-put row the side it belongs to.
using Slot = std::pair<Field, Side>;

// As a configuration writes it: "bid", "call_bid", "put_bid".
std::string slot_word(Slot slot);
// The slot so written; nothing for a word that names none.
std::optional<Slot> slot_of_word(std::string_view word);
// The slot word fewest letters away (Levenshtein) from a word that names none; of equally
// near ones the first in the table. Only the first 60 bytes of the word are compared.
std::string nearest_word(std::string_view word);

// The slot that a header cell names in the ordinary words of the trade. A side is told
// by call or put at either end ("CallBid", "ask (put)"), or by c or p between
// separators ("bid.c", "p_ask").
std::optional<Slot> recognise(std::string_view header);

}  // namespace duskgrid::quotes
