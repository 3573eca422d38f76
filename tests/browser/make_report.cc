// make_report DIR: the pages that report_test.mjs opens. A night of 6,000 underlyings, an
// underlying with a planted fault of each kind, and a large one.
#include <fmt/format.h>

#include <filesystem>
#include <fstream>

#include "sample_report.h"

namespace {

using namespace duskgrid;

void spill(const std::filesystem::path& path, const std::string& text) {
  std::filesystem::create_directories(path.parent_path());
  std::ofstream(path, std::ios::binary) << text;
}

void spill_page(const std::filesystem::path& folder, const SampleReport& sample) {
  spill(folder / publish::report_file_name(sample.record.name),
        publish::report_page(sample.subject, sample.table, sample.as_of));
}

}  // namespace

int main(int argc, char** argv) {
  if (argc != 2) return 64;
  const std::filesystem::path folder = argv[1];
  const std::vector<std::string> remarks{"an invented remark of <b>markup</b>"};
  SampleNight night(6000);
  spill(folder / "index.html", publish::report_index(night.run, night.lines, remarks));
  spill(folder / "duskgrid.js", publish::report_script());
  spill(folder / "duskgrid.css", publish::report_style());
  SampleReport planted("MOOR<script>alert(1)</script>", 6, 21), large("LARGE", 40, 100);
  planted.subject.file_before = "LARGE.html";
  spill_page(folder, planted);
  spill_page(folder, large);
  fmt::print("{} {} {}\n", quotes::format_date(planted.as_of.clock, planted.carried_expiry),
             quotes::format_date(planted.as_of.clock, planted.changed_expiry),
             planted.outlier_strike);
  return 0;
}
