#include "publish/run_record.h"

#include <gtest/gtest.h>

#include <nlohmann/json.hpp>

namespace duskgrid::publish {
namespace {

using nlohmann::json;
using namespace std::chrono_literals;

const quotes::AsOf kAsOf{std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h,
                         {"", std::chrono::minutes{-300}}};

RunRecord made_record() {
  RunRecord run{"1.2.3", kAsOf, R"({"zone":"","grid":{"points":[1.5]}})", {}, {}, {}, {}};
  run.inputs = {{"b.csv", "bb", 20, 2}, {"a.csv", "aa", 10, 1}};
  run.outputs = {{"ledger.csv", "22"}, {"grid.csv", "11"}};
  run.rows.add(quotes::Reason::none);
  run.rows.add(quotes::Reason::none);
  run.rows.add(quotes::Reason::in_the_money);
  run.rows.add(quotes::Reason::no_bid);
  run.underlyings = {
      {"HALYRD", Status::flagged, true, 3, 2, 1, 4, "2031-03-13T16:00:00-05:00", "why"},
      {"=KELPWK", Status::refused, false, 0, 0, 0, 0, "", "no usable quote"}};
  run.previous = {"2031-03-13", "2031-03-13T16:00:00-05:00", "99"};
  return run;
}

TEST(RunToJson, EveryFieldOfTheRunIsThere) {
  const json out = json::parse(run_to_json(made_record()));
  EXPECT_EQ(out["tool"], "duskgrid");
  EXPECT_EQ(out["version"], "1.2.3");
  EXPECT_EQ(out["as_of"], "2031-03-14T16:00:00-05:00");
  EXPECT_EQ(out["configuration"], json::parse(R"({"zone":"","grid":{"points":[1.5]}})"));
  EXPECT_EQ(out["rows"], json::parse(R"({"read":4,"used":2,"spare":1,"dropped":1})"));
  EXPECT_EQ(out["reasons"], json::parse(R"({"in-the-money":1,"no-bid":1})"));
}

TEST(RunToJson, InputsKeepTheirOrderAndOutputsAreByPath) {
  const json out = json::parse(run_to_json(made_record()));
  EXPECT_EQ(out["inputs"], json::parse(R"([{"file":"b.csv","sha256":"bb","bytes":20,"rows":2},
                                           {"file":"a.csv","sha256":"aa","bytes":10,"rows":1}])"));
  EXPECT_EQ(out["outputs"], json::parse(R"([{"file":"grid.csv","sha256":"11"},
                                            {"file":"ledger.csv","sha256":"22"}])"));
}

TEST(RunToJson, UnderlyingsAreByNameWithoutTheGuardOfSpreadsheets) {
  const json out = json::parse(run_to_json(made_record()));
  EXPECT_EQ(out["underlyings"]["HALYRD"],
            json::parse(R"({"status":"flagged","certified":true,"slices":3,"used":2,"inside":1,
            "violations":4,"carried_from":"2031-03-13T16:00:00-05:00","message":"why"})"));
  EXPECT_TRUE(out["underlyings"]["=KELPWK"]["carried_from"].is_null());
}

TEST(RunToJson, FileNameThatIsNoTextDoesNotStopTheRecord) {
  RunRecord run = made_record();
  run.inputs[0].file = "\xFF.csv";
  EXPECT_TRUE(json::accept(run_to_json(run)));
}

TEST(RunFromJson, RecordComesBackAsItWas) {
  const std::string text = run_to_json(made_record());
  const auto back = run_from_json(text, "run.json");
  ASSERT_TRUE(back.ok()) << back.failure().text();
  EXPECT_EQ(run_to_json(*back), text);
}

TEST(RunFromJson, EveryMissingKeyIsRefusedWithItsPlace) {
  const json whole = json::parse(run_to_json(made_record()));
  for (const auto& [key, value] : whole.items()) {
    json part = whole;
    part.erase(key);
    const auto back = run_from_json(part.dump(), "run.json");
    ASSERT_FALSE(back.ok()) << key;
    EXPECT_EQ(back.failure().fault, Fault::not_quotes);
    EXPECT_EQ(back.failure().where, "run.json");
  }
}

TEST(RunFromJson, UnknownWordsAreRefused) {
  json run = json::parse(run_to_json(made_record()));
  run["underlyings"]["HALYRD"]["status"] = "approved";
  EXPECT_FALSE(run_from_json(run.dump(), "").ok());
  run = json::parse(run_to_json(made_record()));
  run["reasons"]["whim"] = 1;
  EXPECT_FALSE(run_from_json(run.dump(), "").ok());
}

TEST(StatusWord, EveryStatusHasItsOwn) {
  EXPECT_EQ(word(Status::published), "published");
  EXPECT_EQ(word(Status::flagged), "flagged");
  EXPECT_EQ(word(Status::carried), "carried");
  EXPECT_EQ(word(Status::refused), "refused");
}

TEST(TimingsToJson, StagesThreadsAndMemoryAreThere) {
  const json out = json::parse(timings_to_json({{{"read", 1.5, 2.5}, {"mark", 3, 4}}, 2, 1024}));
  EXPECT_EQ(out, json::parse(R"({"stages":[{"stage":"read","wall_seconds":1.5,"cpu_seconds":2.5},
      {"stage":"mark","wall_seconds":3.0,"cpu_seconds":4.0}],"threads":2,"peak_memory_bytes":1024})"));
}

}  // namespace
}  // namespace duskgrid::publish
