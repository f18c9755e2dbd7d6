// Convolutions as test cases.
#pragma once

#include <sstream>
#include <string>
#include <vector>

#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {

using Integers = std::vector<std::int64_t>;

struct Geometry {
  std::int64_t n = 1, c = 1, h = 1, w = 1, out_c = 1;
  Integers kernel = {1, 1}, stride = {1, 1}, padding = {0, 0, 0, 0}, dilation = {1, 1};
  std::int64_t groups = 1;
};

inline OpCase conv_case(Random& random, const Geometry& g, bool bias) {
  OpCase c{.op = "conv2d"};
  c.inputs = {random.tensor({g.n, g.c, g.h, g.w})};
  c.weights["weight"] = random.tensor({g.out_c, g.c / g.groups, g.kernel[0], g.kernel[1]});
  if (bias) c.weights["bias"] = random.tensor({g.out_c});
  c.attributes.set("kernel_size", g.kernel);
  c.attributes.set("stride", g.stride);
  c.attributes.set("padding", g.padding);
  c.attributes.set("dilation", g.dilation);
  c.attributes.set("groups", g.groups);
  return c;
}

inline std::string describe(const OpCase& c) {
  std::ostringstream text;
  text << "input " << c.inputs[0].shape().to_string() << " weight "
       << c.weights.at("weight").shape().to_string();
  for (const auto& [name, value] : c.attributes.values()) {
    text << ' ' << name;
    if (const auto* list = std::get_if<Integers>(&value)) {
      for (const auto i : *list) text << ' ' << i;
    }
    if (const auto* one = std::get_if<std::int64_t>(&value)) text << ' ' << *one;
  }
  text << " activation " << ops::activation_name(c.activation.kind);
  if (c.residual.data() != nullptr) text << " residual";
  return text.str();
}

}  // namespace leadsman::testing
