// Speed of the vector kernels on the shapes of published networks.
//
//   kernels_bench [--threads=N] [--strategy=NAME] [Google Benchmark's own options]
//
// GFLOP/s counts two for each multiply-add. `best` and `median` are shares of the floating-point
// peak that the same binary measures around each benchmark: of its fastest run and of its median
// one. With one thread, runs and peak are measured in that thread's processor time, which other
// work on the machine disturbs less than the clock on the wall.
//
// Weights are cold, as in a network whose weights do not fit in the caches: each run takes the
// next of several copies of the layer. LEADSMAN_SIMD selects the instruction set; --strategy runs
// another kernel than the planner would choose, where that one can.
#include <algorithm>
#include <array>
#include <cstdio>
#include <cstdlib>
#include <memory>
#include <string>
#include <string_view>
#include <vector>

#include <benchmark/benchmark.h>

#include "core/threads.h"
#include "leadsman/error.h"
#include "ops/operator.h"
#include "ops/simd/aligned.h"
#include "ops/simd/peak.h"
#include "ops/simd/target.h"

namespace leadsman::bench {
namespace {

int thread_count = 1;
std::string wanted_strategy;  // empty: the planner's choice

struct Layer {
  std::string op;
  Attributes attributes;
  std::vector<Shape> inputs;
  std::vector<std::pair<std::string, Shape>> weights;
  ops::Activation activation{};
};

Tensor filled(const Shape& shape) {
  Tensor tensor(shape);
  float* data = tensor.mutable_data();
  for (std::int64_t i = 0; i < shape.elements(); ++i) {
    data[i] = static_cast<float>((i * 7919) % 2003 - 1001) * 1e-3F;
  }
  return tensor;
}

void run_layer(benchmark::State& state, const Layer& layer) {
  const ops::Operator& op = *ops::find_operator(layer.op);
  ops::OpContext context;
  context.attributes = ops::complete_attributes(op.contract(), layer.attributes);
  context.inputs = layer.inputs;
  std::int64_t weight_bytes = 1;
  for (const auto& [role, shape] : layer.weights) {
    context.weights[role] = filled(shape);
    weight_bytes += shape.elements() * 4;
  }
  context.output = op.output_shape(context);
  const auto strategies = op.strategies();
  const auto chosen =
      std::find_if(strategies.begin(), strategies.end(), [&](const ops::Strategy* strategy) {
        return strategy->refusal(context).empty() &&
               (wanted_strategy.empty() || strategy->name() == wanted_strategy);
      });
  if (chosen == strategies.end()) {
    state.SkipWithError("no such strategy for this layer");
    return;
  }

  // Enough copies that a layer's weights have left the second-level cache when it comes again.
  constexpr std::int64_t kColdBytes = 64 << 20;
  const std::int64_t copies = std::clamp<std::int64_t>(kColdBytes / weight_bytes, 1, 16);
  std::vector<std::unique_ptr<ops::Kernel>> kernels;
  for (std::int64_t i = 0; i < copies; ++i) {
    kernels.push_back((*chosen)->prepare(context, {.activation = layer.activation}));
  }
  std::vector<Tensor> inputs;
  std::vector<ConstTensorView> views;
  for (const Shape& shape : layer.inputs) {
    inputs.push_back(filled(shape));
    views.emplace_back(inputs.back().data(), shape);
  }
  ops::simd::AlignedFloats output(context.output.elements());
  ops::simd::AlignedFloats workspace(
      static_cast<std::int64_t>(kernels[0]->workspace_bytes(thread_count) / sizeof(float)) + 1);
  const ops::KernelCall call{.inputs = views,
                             .output = {output.data(), context.output},
                             .residual = nullptr,
                             .workspace = reinterpret_cast<std::byte*>(workspace.data()),
                             .threads = thread_count};

  std::size_t next = 0;
  std::vector<double> seconds;
  const KeepAwake awake(thread_count, std::chrono::microseconds(200));
  double peak = ops::simd::measure_peak(thread_count);
  for (auto _ : state) {
    const double begin = ops::simd::now(thread_count);
    kernels[next]->run(call);
    seconds.push_back(ops::simd::now(thread_count) - begin);
    next = (next + 1) % kernels.size();
  }
  peak = std::max(peak, ops::simd::measure_peak(thread_count));
  std::sort(seconds.begin(), seconds.end());
  const double flops = 2.0 * static_cast<double>(op.cost(context).macs);
  state.counters["best"] = flops / seconds.front() / peak;
  state.counters["median"] = flops / seconds[seconds.size() / 2] / peak;
  state.counters["GFLOP/s"] = flops / seconds.front() * 1e-9;
  state.counters["peak"] = peak * 1e-9;
  state.SetLabel(std::string((*chosen)->name()));
}

void add(const std::string& name, const Layer& layer) {
  benchmark::RegisterBenchmark(name.c_str(), [layer](benchmark::State& state) {
    run_layer(state, layer);
  })->UseRealTime();
}

void add_matrix(std::int64_t rows, std::int64_t depth, std::int64_t cols,
                ops::ActivationKind activation = ops::ActivationKind::kRelu) {
  std::string name =
      "matrix/" + std::to_string(rows) + "x" + std::to_string(depth) + "x" + std::to_string(cols);
  if (activation != ops::ActivationKind::kRelu) {
    name += "_" + std::string(ops::activation_name(activation));
  }
  add(name, {.op = "linear",
             .attributes = {},
             .inputs = {{rows, depth}},
             .weights = {{"weight", {cols, depth}}, {"bias", {cols}}},
             .activation = {activation, 0.0F}});
}

void add_conv(std::int64_t size, std::int64_t channels, std::int64_t out, std::int64_t kernel,
              std::int64_t stride, std::int64_t pad, std::int64_t groups = 1) {
  Layer layer{.op = "conv2d",
              .attributes = {},
              .inputs = {{1, channels, size, size}},
              .weights = {{"weight", {out, channels / groups, kernel, kernel}}, {"bias", {out}}},
              .activation = {ops::ActivationKind::kRelu, 0.0F}};
  layer.attributes.set("kernel_size", kernel);
  layer.attributes.set("stride", stride);
  layer.attributes.set("padding", pad);
  layer.attributes.set("groups", groups);
  add(std::string(groups == 1 ? "conv/" : "depthwise/") + std::to_string(size) + "x" +
          std::to_string(channels) + "_" + std::to_string(out) + "_k" + std::to_string(kernel) +
          "s" + std::to_string(stride),
      layer);
}

void add_attention(std::int64_t tokens, std::int64_t channels, std::int64_t heads) {
  Layer layer{
      .op = "attention", .attributes = {}, .inputs = {{1, tokens, 3 * channels}}, .weights = {}};
  layer.attributes.set("heads", heads);
  add("attention/" + std::to_string(tokens) + "x" + std::to_string(channels), layer);
}

void add_windows(std::int64_t size, std::int64_t channels) {
  Layer layer{.op = "window_attention",
              .attributes = {},
              .inputs = {{1, 3 * channels, size, size}},
              .weights = {{"position_bias", {169, channels / 32}}}};
  layer.attributes.set("heads", channels / 32);
  layer.attributes.set("window", std::int64_t{7});
  layer.attributes.set("shift", std::int64_t{3});
  add("windows/" + std::to_string(size) + "x" + std::to_string(channels), layer);
}

void add_all() {
  // ResNet's and MobileNetV2's 1x1 convolutions and ViT-B/16's linear layers.
  for (const auto& [m, k, n] : std::vector<std::array<std::int64_t, 3>>{{3136, 64, 64},
                                                                        {3136, 256, 64},
                                                                        {784, 512, 128},
                                                                        {196, 1024, 256},
                                                                        {49, 2048, 512},
                                                                        {49, 512, 2048},
                                                                        {197, 2304, 768},
                                                                        {197, 768, 768},
                                                                        {197, 3072, 768},
                                                                        {197, 768, 3072},
                                                                        {196, 384, 64},
                                                                        {49, 320, 960},
                                                                        {3136, 24, 144},
                                                                        {12544, 96, 16},
                                                                        {1, 2048, 1000}}) {
    add_matrix(m, k, n);
  }
  add_matrix(3136, 96, 384, ops::ActivationKind::kGelu);
  add_matrix(196, 384, 1536, ops::ActivationKind::kGelu);
  add_matrix(12544, 16, 96, ops::ActivationKind::kSilu);
  add_matrix(196, 80, 480, ops::ActivationKind::kSilu);
  add_matrix(196, 112, 672, ops::ActivationKind::kHardSwish);
  add_conv(56, 64, 64, 3, 1, 1);
  add_conv(28, 128, 128, 3, 1, 1);
  add_conv(14, 256, 256, 3, 1, 1);
  add_conv(7, 512, 512, 3, 1, 1);
  add_conv(56, 64, 128, 3, 2, 1);
  add_conv(14, 256, 512, 3, 2, 1);
  add_conv(224, 3, 64, 7, 2, 3);
  add_conv(224, 3, 768, 16, 16, 0);
  add_conv(224, 3, 32, 3, 2, 1);
  for (const auto& [size, channels] :
       {std::pair<std::int64_t, std::int64_t>{112, 32}, {56, 144}, {14, 384}, {7, 960}}) {
    add_conv(size, channels, channels, 3, 1, 1, channels);
  }
  add_conv(112, 96, 96, 3, 2, 1, 96);
  add_conv(14, 576, 576, 3, 2, 1, 576);
  for (const auto& [size, channels] :
       {std::pair<std::int64_t, std::int64_t>{28, 120}, {14, 480}, {7, 1152}}) {
    add_conv(size, channels, channels, 5, 1, 2, channels);
  }
  add_conv(56, 144, 144, 5, 2, 2, 144);
  for (const auto& [size, channels] :
       {std::pair<std::int64_t, std::int64_t>{56, 96}, {28, 192}, {14, 384}, {7, 768}}) {
    add_conv(size, channels, channels, 7, 1, 3, channels);
  }
  add_attention(197, 768, 12);
  add_attention(1025, 768, 12);
  add_windows(56, 96);
  add_windows(14, 384);
}

}  // namespace
}  // namespace leadsman::bench

int main(int argc, char** argv) {
  try {
    leadsman::ops::simd::choose_target();
  } catch (const leadsman::Error& error) {
    std::fprintf(stderr, "kernels_bench: %s\n", error.what());
    return static_cast<int>(error.kind());
  }
  std::vector<char*> rest;
  for (int i = 0; i < argc; ++i) {
    const std::string_view argument(argv[i]);
    if (argument.starts_with("--threads=")) {
      leadsman::bench::thread_count = std::max(1, std::atoi(argv[i] + argument.find('=') + 1));
    } else if (argument.starts_with("--strategy=")) {
      leadsman::bench::wanted_strategy = argument.substr(argument.find('=') + 1);
    } else {
      rest.push_back(argv[i]);
    }
  }
  int count = static_cast<int>(rest.size());
  benchmark::Initialize(&count, rest.data());
  if (benchmark::ReportUnrecognizedArguments(count, rest.data())) return 2;
  benchmark::AddCustomContext("instruction set", std::string(leadsman::ops::simd::target_in_use()));
  benchmark::AddCustomContext("threads", std::to_string(leadsman::bench::thread_count));
  leadsman::bench::add_all();
  benchmark::RunSpecifiedBenchmarks();
  return 0;
}
