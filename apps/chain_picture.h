// A chain of quotes as a picture in text: expiries down, strikes across.
#pragma once

#include <string>

#include "quotes/chain.h"
#include "quotes/instants.h"

namespace duskgrid::commands {

// At most 80 columns. A cell is the darker the more of the contracts that fall into it have a firm
// bid and ask; the lightest has none. In block characters, or in ASCII.
std::string chain_picture(const quotes::QuoteTable& table, const quotes::Chain& chain,
                          const quotes::Clock& clock, bool blocks);

}  // namespace duskgrid::commands
