# The stages, in the order of the data. Each links only stages listed above it.
add_stage(quotes
  SOURCES chain.cc clean.cc columns.cc instants.cc ledger.cc load.cc osi.cc quote.cc
    blocks.cc bytes.cc cells.cc contracts.cc digest.cc encoding.cc memo.cc paths.cc rows.cc spellings.cc
  PRIVATE_NEEDS Boost::iostreams OpenSSL::Crypto TBB::tbb date::date-tz fmt::fmt Threads::Threads)

add_stage(market
  SOURCES curve.cc dates.cc day_count.cc dividend_file.cc dividends.cc parity.cc
  NEEDS duskgrid::quotes PRIVATE_NEEDS fmt::fmt)

add_stage(pricing
  SOURCES american.cc american_batch.cc american_dividend_batch.cc american_dividend_panel.cc
    american_dividends.cc american_forwards.cc american_panel.cc american_rules.cc american_slice.cc
    black.cc invert.cc invert_batch.cc selection.cc
  NEEDS duskgrid::market PRIVATE_NEEDS Boost::boost fmt::fmt hwy::hwy)
# Vectors without a size known to the compiler have no operators, which the kernel uses.
target_compile_definitions(duskgrid_pricing PRIVATE
  "HWY_DISABLED_TARGETS=(HWY_SVE|HWY_SVE2|HWY_SVE_256|HWY_SVE2_128|HWY_RVV)")

add_stage(surface
  SOURCES backbone.cc carry.cc derived.cc fit.cc overlay.cc quadratic_program.cc slice_model.cc surface.cc
  NEEDS duskgrid::pricing PRIVATE_NEEDS Boost::boost Eigen3::Eigen fmt::fmt)

add_stage(arbitrage
  SOURCES certificate.cc enclosure.cc grid_checks.cc quote_checks.cc surface_checks.cc violation.cc
  NEEDS duskgrid::surface PRIVATE_NEEDS fmt::fmt)

add_stage(publish
  SOURCES compare.cc grid.cc grid_file.cc history.cc output_lock.cc past_run.cc points_file.cc
    report.cc report_page.cc report_text.cc run_audit.cc run_folder.cc run_record.cc surface_json.cc
    sync_files.cc table_file.cc tables.cc tables_parallel.cc text.cc values.cc
  NEEDS duskgrid::arbitrage
  PRIVATE_NEEDS Boost::boost Boost::iostreams SQLite::SQLite3 TBB::tbb Threads::Threads fmt::fmt
    nlohmann_json::nlohmann_json)

# The pages of the report, and D3 as Debian packs it, become bytes of the library.
find_file(DUSKGRID_D3 d3.min.js REQUIRED
  PATHS /usr/share/nodejs/d3/dist /usr/share/javascript/d3 /usr/lib/nodejs/d3/dist
  NO_CMAKE_FIND_ROOT_PATH)
set(report ${CMAKE_CURRENT_SOURCE_DIR}/lib/publish/report)
set(report_files d3=${DUSKGRID_D3} d3_licence=${report}/d3_licence.txt
  index_page=${report}/index.html underlying_page=${report}/underlying.html
  style=${report}/style.css common=${report}/common.js index_script=${report}/index.js
  frame=${report}/frame.js smile=${report}/smile.js surface=${report}/surface.js
  forward=${report}/forward.js ledger=${report}/ledger.js changes=${report}/changes.js
  page_script=${report}/page.js)
list(TRANSFORM report_files REPLACE "^[^=]*=" "" OUTPUT_VARIABLE report_paths)
set(embedded ${CMAKE_CURRENT_BINARY_DIR}/report_files.cc)
add_custom_command(OUTPUT ${embedded}
  COMMAND ${CMAKE_COMMAND} -DOUT=${embedded} "-DFILES=${report_files}" -P ${report}/embed.cmake
  DEPENDS ${report_paths} ${report}/embed.cmake VERBATIM)
target_sources(duskgrid_publish PRIVATE ${embedded})

add_stage(night
  SOURCES carry.cc changes.cc config.cc expiries.cc mark.cc previous.cc report_pages.cc run.cc
    slice_market.cc
  NEEDS duskgrid::publish
  PRIVATE_NEEDS TBB::tbb fmt::fmt nlohmann_json::nlohmann_json tomlplusplus::tomlplusplus)
target_compile_definitions(duskgrid_night PRIVATE DUSKGRID_VERSION="${PROJECT_VERSION}")
