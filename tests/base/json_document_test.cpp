#include "base/json_document.hpp"

#include <gtest/gtest.h>

namespace tapwright {
namespace {

using nlohmann::json;

std::vector<std::string> texts(const std::vector<Diagnostic>& notes) {
  std::vector<std::string> out;
  for (const Diagnostic& note : notes) out.push_back(to_string(note));
  return out;
}

using Texts = std::vector<std::string>;

TEST(JsonDocument, KnowsTheLineOfEachMemberAndOfEachObjectInAList) {
  const auto document = parse_json(
      "{\n"
      "  // a comment\n"
      "  \"a\": 1,\n"
      "  \"list\": [\n"
      "    {\"x\": 1},\n"
      "    {\n"
      "      \"x\": 2}],\n"
      "  /* another,\n"
      "     on two lines */ \"b\": 3}\n",
      "f.json");
  ASSERT_TRUE(document);
  EXPECT_EQ(document.value->place("a").line, 3);
  EXPECT_EQ(document.value->place("list").line, 4);
  EXPECT_EQ(document.value->place("list[0]").line, 5);
  EXPECT_EQ(document.value->place("list[1]").line, 6);
  EXPECT_EQ(document.value->place("list[1].x").line, 7);
  EXPECT_EQ(document.value->place("b").line, 9);
  EXPECT_EQ(document.value->place("list[1].absent").line, 6);  // the nearest known
}

TEST(JsonDocument, SyntaxErrorsNameTheLine) {
  const auto document = parse_json("{\n  \"a\": 1\n  \"b\": 2\n}\n", "f.json");
  ASSERT_FALSE(document);
  ASSERT_EQ(document.notes.size(), 1U);
  EXPECT_EQ(document.notes[0].file, "f.json");
  EXPECT_EQ(document.notes[0].line, 3);
  EXPECT_TRUE(document.notes[0].message.starts_with("not JSON: syntax error"))
      << document.notes[0].message;
}

TEST(JsonDocument, RefusesAKeyGivenTwiceAndNamesBothLines) {
  EXPECT_EQ(texts(parse_json("{\"s\": {\"a\": 1,\n\"b\": 2,\n\"a\": 3}}", "f.json").notes),
            Texts{"f.json:3: error: s: key \"a\" is given twice, first on line 1"});
}

TEST(JsonDocument, RefusesTooMuchNestingTooManyBytesAndTooLargeNumbers) {
  EXPECT_EQ(texts(parse_json(std::string(33, '['), "f.json").notes),
            Texts{"f.json:1: error: lists and objects are nested deeper than 32 levels"});
  EXPECT_EQ(texts(parse_json("[1, 2]", "f.json", {5, 32}).notes),
            Texts{"f.json: error: the file has 6 bytes; allowed: at most 5"});
  const auto large = parse_json("[\n1e999]", "f.json");
  ASSERT_EQ(large.notes.size(), 1U);
  EXPECT_EQ(large.notes[0].line, 2);
}

/// Notes about `text` under `schema`, and the document with its defaults.
std::pair<Texts, json> checked(const std::string& text, const std::string& schema) {
  auto document = parse_json(text, "f");
  EXPECT_TRUE(document);
  auto notes = check_against_schema(*document.value, json::parse(schema));
  return {texts(notes), document.value->root};
}

TEST(JsonSchema, ChecksEachKeywordAndSaysWhatIsAllowed) {
  const struct {
    const char* schema;
    const char* good;
    const char* bad;
    const char* message;
  } cases[] = {
      {R"({"type":"integer"})", "4", "4.5", "f: error: 4.5 is not a whole number"},
      {R"({"type":"integer"})", "4.0", "\"4\"", "f: error: \"4\" is not a whole number"},
      {R"({"type":["number","string"]})", "1.5", "[]",
       "f: error: a list is not a number or a text"},
      {R"({"const":"v1"})", "\"v1\"", "\"v2\"", "f: error: \"v2\" must be \"v1\""},
      {R"({"enum":["best","edge"]})", "\"edge\"", "\"bset\"",
       "f: error: \"bset\" is not one of \"best\" or \"edge\"; did you mean \"best\"?"},
      {R"({"minimum":0,"maximum":1,"unit":"UI"})", "1", "1.5",
       "f: error: 1.5 is out of range; allowed: at least 0 and at most 1 UI"},
      {R"({"exclusiveMinimum":0})", "1e-300", "0", "f: error: 0 is out of range; allowed: above 0"},
      {R"({"exclusiveMaximum":2})", "1.9", "2", "f: error: 2 is out of range; allowed: below 2"},
      {R"({"minLength":1})", "\"a\"", "\"\"", "f: error: the text may not be empty"},
      {R"({"minItems":2,"maxItems":2})", "[1,2]", "[1]",
       "f: error: the list has 1 entry; allowed: 2"},
      {R"({"items":{"type":"number"}})", "[1,2]", "[1,null]",
       "f: error: [1]: null is not a number"},
      {R"({"prefixItems":[{"type":"integer"},{"type":"number"}]})", "[1,2.5]", "[1.5,2]",
       "f: error: [0]: 1.5 is not a whole number"},
      {R"({"properties":{"levels":{}},"additionalProperties":false})", R"({"levels":1})",
       R"({"lvels":1})", "f:1: error: unknown key \"lvels\"; did you mean \"levels\"?"},
      {R"({"properties":{"a":{"title":"length"}},"required":["a"]})", R"({"a":1})", "{}",
       "f: error: key \"a\" is missing (length)"},
      {R"({"dependentRequired":{"step":["max"]}})", R"({"step":1,"max":2})", R"({"step":1})",
       "f: error: key \"step\" needs key \"max\" beside it"},
      {R"({"properties":{"a":{},"b":{}},"minProperties":1,"maxProperties":1})", R"({"b":1})",
       R"({"a":1,"b":2})",
       "f: error: has keys \"a\" and \"b\"; allowed: exactly one of \"a\" or \"b\""},
      {R"({"oneOf":[{"required":["min","max"]},{"required":["codes"]}]})", R"({"codes":1})",
       R"({"min":1})", "f: error: needs \"min\" with \"max\" or \"codes\""},
      {R"({"oneOf":[{"required":["min"]},{"required":["codes"]}]})", R"({"min":1})",
       R"({"min":1,"codes":2})", "f: error: has both \"min\" and \"codes\"; allowed: one of them"},
      {R"({"oneOf":[{"type":"number"},{"type":"array","items":{"type":"number"}}]})", "[1]",
       "[true]", "f: error: [0]: true is not a number"},
      {R"({"oneOf":[{"type":"number"},{"type":"array"}]})", "1", "{}",
       "f: error: an object is not a number or a list"},
      {R"({"$ref":"#/$defs/n","$defs":{"n":{"type":"number"}}})", "1", "true",
       "f: error: true is not a number"},
  };
  for (const auto& one : cases) {
    EXPECT_EQ(checked(one.good, one.schema).first, Texts{}) << one.schema;
    EXPECT_EQ(checked(one.bad, one.schema).first, Texts{one.message}) << one.schema;
  }
}

TEST(JsonSchema, FillsInDefaultsAtEveryDepth) {
  const auto [notes, root] =
      checked(R"({"given": 5})",
              R"({"properties": {"given": {"default": 1}, "absent": {"default": 2},
          "section": {"default": {}, "properties": {"inner": {"$ref": "#/$defs/three"}}}},
          "$defs": {"three": {"default": 3}}})");
  EXPECT_EQ(notes, Texts{});
  EXPECT_EQ(root, json::parse(R"({"given": 5, "absent": 2, "section": {"inner": 3}})"));
}

TEST(JsonSchema, JudgesByTheBranchThatFitsBest) {
  const std::string schema =
      R"({"oneOf": [
          {"type": "object", "required": ["a"], "additionalProperties": false,
           "properties": {"a": {"type": "number"}, "length": {}}},
          {"type": "object", "required": ["b"], "additionalProperties": false,
           "properties": {"b": {"type": "number"}, "length": {}}}]})";
  EXPECT_EQ(checked(R"({"length": 1, "b": "x"})", schema).first,
            Texts{"f:1: error: b: \"x\" is not a number"});
}

TEST(JsonSchema, GivesTheFirstTwentyNotesInTheOrderOfTheFile) {
  std::string text = "{";
  for (int i = 30; i > 0; --i) text += "\n\"k" + std::to_string(i) + "\": 1" + (i > 1 ? "," : "}");
  const auto [notes, root] = checked(text, R"({"properties":{},"additionalProperties":false})");
  ASSERT_EQ(notes.size(), 20U);
  EXPECT_TRUE(notes.front().starts_with("f:2: error: unknown key \"k30\"")) << notes.front();
  EXPECT_TRUE(notes.back().starts_with("f:21: error: unknown key \"k11\"")) << notes.back();
}

TEST(JsonSchema, RefusesASchemaThatItDoesNotUnderstand) {
  EXPECT_THROW(checked("1", R"({"multipleOf": 2})"), std::invalid_argument);
}

TEST(SetValue, ReplacesAddsAndSaysWhyNot) {
  auto document = *parse_json(R"({"a": {"b": [1, {"c": 2}]}})", "f").value;
  EXPECT_TRUE(set_value(document, "a.b[1].c", 7).empty());
  EXPECT_TRUE(set_value(document, "x.y", "new").empty());
  EXPECT_EQ(document.root, json::parse(R"({"a": {"b": [1, {"c": 7}]}, "x": {"y": "new"}})"));
  const auto refused = [&](const std::string& path) { return texts(set_value(document, path, 1)); };
  EXPECT_EQ(refused("a.b[2]"),
            Texts{"f: error: can't set \"a.b[2]\": a.b has 2 entries, from [0]"});
  EXPECT_EQ(refused("a[0]"), Texts{"f: error: can't set \"a[0]\": a is not a list"});
  EXPECT_EQ(refused("x.y.z"), Texts{"f: error: can't set \"x.y.z\": x.y is not an object"});
  EXPECT_EQ(refused("a.b[x]"),
            Texts{"f: error: can't set \"a.b[x]\": a list index must be a whole number in "
                  "brackets"});
  EXPECT_EQ(refused(""), Texts{"f: error: can't set \"\": the path is empty"});
}

}  // namespace
}  // namespace tapwright
