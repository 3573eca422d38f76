# The stages, in the order of the data. Each links only stages listed above it.
add_stage(quotes
  SOURCES clean.cc columns.cc instants.cc ledger.cc load.cc osi.cc quote.cc
  PRIVATE_NEEDS Boost::iostreams date::date-tz fmt::fmt Threads::Threads)
