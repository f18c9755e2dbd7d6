#include "loaders/architectures/graph_writer.h"

#include <cmath>

namespace leadsman::loaders {
namespace {

// How far trained-looking gains, biases and statistics lie from 1 and 0.
constexpr double kSpread = 0.1;

// Power of an activation of a normal variable of mean 0 and this power: the integral of its square
// against the normal density, or for silu and sigmoid a fit within 2 % of it below power 4.
double power_after(const std::string& kind, double power) {
  if (kind == "silu") return 0.25 * power * (1.0 + power / (power + 1.37));
  if (kind == "sigmoid") return 0.25 * (1.0 + power / (power + 4.8));
  return 0.425 * power;  // gelu, at power 1
}

}  // namespace

GraphWriter::GraphWriter(std::string name, const ArchitectureOptions& options) : options_(options) {
  constexpr std::int64_t kFree = GraphInput::kFree;
  architecture_.graph.name = std::move(name);
  architecture_.graph.inputs.push_back(
      {"image", {kFree, 3, kFree, kFree}, {options.size.height, options.size.width}});
  flows_["image"] = {3, 1.0, 0.0};
}

std::string GraphWriter::layer(const std::string& name, const std::string& op,
                               std::vector<std::string> inputs, const AttributeList& attributes) {
  flows_[name] = flows_.at(inputs.front());
  Layer layer{name, op, std::move(inputs), {}, {}};
  for (const auto& [key, value] : attributes) layer.attributes.set(key, value);
  architecture_.graph.layers.push_back(std::move(layer));
  return name;
}

void GraphWriter::weight(const std::string& role, const std::string& tensor,
                         const ArchitectureWeight& weight) {
  architecture_.graph.layers.back().weights[role] = tensor;
  architecture_.weights[tensor] = weight;
}

std::string GraphWriter::conv(const std::string& name, const std::string& input, std::int64_t out,
                              const Convolution& c) {
  const Flow in = flows_.at(input);
  layer(name, "conv2d", {input},
        {{"kernel_size", c.kernel},
         {"stride", c.stride},
         {"padding", c.padding},
         {"groups", c.groups}});
  const Shape shape{out, in.channels / c.groups, c.kernel, c.kernel};
  const double terms = static_cast<double>(shape.elements()) / static_cast<double>(out);
  weight("weight", name + ".weight", {shape, 0.0, c.gain / std::sqrt(terms * in.power)});
  if (c.bias) weight("bias", name + ".bias", {{out}, 0.0, kSpread});
  flows_[name] = {out, c.gain * c.gain, 0.0};
  return name;
}

std::string GraphWriter::linear(const std::string& name, const std::string& input, std::int64_t out,
                                const std::string& joint) {
  const Flow in = flows_.at(input);
  layer(name, "linear", {input});
  const double spread = 1.0 / std::sqrt(static_cast<double>(in.channels) * in.power);
  weight("weight", name + joint + "weight", {{out, in.channels}, 0.0, spread});
  weight("bias", name + joint + "bias", {{out}, 0.0, kSpread});
  flows_[name] = {out, 1.0, 0.0};
  return name;
}

std::string GraphWriter::batch_norm(const std::string& name, const std::string& input,
                                    double gain) {
  const Flow in = flows_.at(input);
  layer(name, "batch_norm", {input}, {{"eps", 1e-5}});
  const Shape shape{in.channels};
  weight("weight", name + ".weight", {shape, gain, kSpread * gain});
  weight("bias", name + ".bias", {shape, 0.0, kSpread * gain});
  weight("mean", name + ".running_mean", {shape, 0.0, kSpread});
  weight("variance", name + ".running_var", {shape, in.power, kSpread * in.power});
  // Gain, mean, variance and bias add the square of the spread each.
  flows_[name] = {in.channels, gain * gain * (1.0 + 4.0 * kSpread * kSpread), 0.0};
  return name;
}

std::string GraphWriter::layer_norm(const std::string& name, const std::string& input, double eps,
                                    const std::string& tensors) {
  const Flow in = flows_.at(input);
  layer(name, "layer_norm", {input}, {{"eps", eps}});
  weight("weight", tensors + ".weight", {{in.channels}, 1.0, kSpread});
  weight("bias", tensors + ".bias", {{in.channels}, 0.0, kSpread});
  flows_[name] = {in.channels, 1.0 + 2.0 * kSpread * kSpread, 0.0};
  return name;
}

std::string GraphWriter::activation(const std::string& name, const std::string& input,
                                    const std::string& kind) {
  layer(name, "activation", {input}, {{"kind", kind}});
  Flow& out = flows_[name];
  if (!kind.starts_with("relu")) {
    out = {out.channels, power_after(kind, out.power), 0.0};
    return name;
  }
  // Half of what lies around 0 is lost, and the less of it the more a positive part lifts it up.
  const double share = 0.5 * (1.0 + out.positive / out.power);
  out.power = out.positive + share * (out.power - out.positive);
  out.positive = out.power;
  return name;
}

std::string GraphWriter::add(const std::string& name, const std::string& first,
                             const std::string& second) {
  layer(name, "add", {first, second});
  const Flow& other = flows_.at(second);
  flows_[name].power += other.power;
  flows_[name].positive += other.positive;
  return name;
}

std::string GraphWriter::mul(const std::string& name, const std::string& image,
                             const std::string& factors) {
  layer(name, "mul", {image, factors});
  flows_[name].power *= flows_.at(factors).power;
  return name;
}

std::string GraphWriter::scale(const std::string& name, const std::string& input,
                               const std::string& tensor, const ArchitectureWeight& factors) {
  layer(name, "scale", {input});
  weight("weight", tensor, factors);
  flows_[name].power *= factors.mean * factors.mean + factors.spread * factors.spread;
  return name;
}

std::string GraphWriter::global_pool(const std::string& name, const std::string& input) {
  return layer(name, "adaptive_avg_pool", {input}, {{"output_size", std::int64_t{1}}});
}

Architecture GraphWriter::finish(const std::string& output) {
  architecture_.graph.outputs = {output};
  check_graph(architecture_.graph);
  return std::move(architecture_);
}

}  // namespace leadsman::loaders
