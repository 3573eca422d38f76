#include "publish/tables_parallel.h"

#include <tbb/enumerable_thread_specific.h>
#include <tbb/global_control.h>
#include <tbb/parallel_pipeline.h>

#include <algorithm>
#include <atomic>

namespace duskgrid::publish {

void write_lines(RunFile& file, std::size_t count, std::size_t at_a_time,
                 const quotes::Clock& clock, const FormatLines& format) {
  constexpr std::size_t kPiecesAThread = 3;
  tbb::enumerable_thread_specific<InstantTexts> instants([&] { return InstantTexts(clock); });
  std::size_t next = 0;
  std::atomic<bool> wanted = true;
  const auto start = [&](tbb::flow_control& flow) {
    const std::size_t first = next;
    next = std::min(count, first + at_a_time);
    if (first == next || !wanted) flow.stop();
    return first;
  };
  const auto lines = [&](std::size_t first) {
    std::string out;
    format(first, std::min(count, first + at_a_time), out, instants.local());
    return out;
  };
  const auto write = [&](const std::string& out) { wanted = file.write(out); };
  tbb::parallel_pipeline(
      kPiecesAThread *
          tbb::global_control::active_value(tbb::global_control::max_allowed_parallelism),
      tbb::make_filter<void, std::size_t>(tbb::filter_mode::serial_in_order, start) &
          tbb::make_filter<std::size_t, std::string>(tbb::filter_mode::parallel, lines) &
          tbb::make_filter<std::string, void>(tbb::filter_mode::serial_in_order, write));
}

}  // namespace duskgrid::publish
