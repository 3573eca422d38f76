#include <cmath>
#include <cstdio>

#include "night/config.h"
#include "pricing/invert.h"

int main() {
  using namespace duskgrid;
  const pricing::BlackTerms terms{quotes::PutCall::call, 100, 110, 0.98};
  const double vol = 0.25, years = 0.5;
  const double price = pricing::black_price(terms, vol * std::sqrt(years));
  const auto implied = pricing::implied_vol(terms, price, years);
  const auto config = night::parse_config("as_of = \"2031-03-14\"", "here", "");
  std::printf("%.15f\n", implied.vol);
  // Well conditioned: a few roundings.
  return std::abs(implied.vol - vol) < 1e-14 && config.ok() ? 0 : 1;
}
