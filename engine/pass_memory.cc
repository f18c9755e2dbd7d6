// Lifetimes to arena offsets.
//
// Values are placed largest first, each at the lowest offset that is free during its whole life
// ("greedy by size", Pisarchyk & Lee 2020, arXiv:2001.03288).
#include <algorithm>
#include <numeric>

#include "core/aligned_memory.h"
#include "engine/plan_state.h"

namespace leadsman::internal {
namespace {

struct Life {
  std::size_t first = 0;  // 0: before the first step; s + 1: written by step s
  std::size_t last = 0;   // the last step that reads it, + 1
  std::size_t bytes = 0;
};

std::size_t bytes_of(const Shape& shape) {
  return aligned_bytes(static_cast<std::size_t>(shape.elements()) * sizeof(float));
}

// When each value is read for the last time, by storage.
std::vector<std::size_t> last_reads(const PlanState& plan) {
  std::vector<std::size_t> last(plan.values.size(), 0);
  for (std::size_t s = 0; s < plan.steps.size(); ++s) {
    const Step& step = plan.steps[s];
    for (const ValueId input : step.inputs) last[plan.values[input].storage] = s + 1;
    if (step.residual) last[plan.values[*step.residual].storage] = s + 1;
  }
  for (const ValueId output : plan.outputs) {
    last[plan.values[output].storage] = plan.steps.size() + 1;
  }
  return last;
}

void share_view_storage(PlanState& plan) {
  for (const Step& step : plan.steps) {
    if (step.is_view) plan.values[step.output].storage = plan.values[step.inputs[0]].storage;
  }
}

void share_in_place_storage(PlanState& plan) {
  for (std::size_t s = 0; s < plan.steps.size(); ++s) {
    const Step& step = plan.steps[s];
    if (step.is_view) {
      plan.values[step.output].storage = plan.values[step.inputs[0]].storage;
      continue;
    }
    const ValueId source = plan.values[step.inputs[0]].storage;
    const bool same_size =
        plan.values[source].shape.elements() == plan.values[step.output].shape.elements();
    // Recomputed because each sharing lengthens the life of the storage it joins.
    if (step.kernel->runs_in_place() && same_size && last_reads(plan)[source] == s + 1) {
      plan.values[step.output].storage = source;
      for (std::size_t later = s + 1; later < plan.steps.size(); ++later) {
        const Step& view = plan.steps[later];
        if (view.is_view) plan.values[view.output].storage = plan.values[view.inputs[0]].storage;
      }
    }
  }
}

std::vector<Life> lifetimes(const PlanState& plan) {
  const std::vector<std::size_t> last = last_reads(plan);
  std::vector<Life> lives(plan.values.size());
  std::vector<bool> born(plan.values.size(), false);
  const auto extend = [&](ValueId value, std::size_t when) {
    const ValueId storage = plan.values[value].storage;
    Life& life = lives[storage];
    if (!born[storage]) {
      life = {.first = when, .last = std::max(when, last[storage]), .bytes = 0};
      born[storage] = true;
    }
    life.bytes = std::max(life.bytes, bytes_of(plan.values[value].shape));
    life.last = std::max(life.last, when);
  };
  for (ValueId input = 0; input < plan.graph.inputs.size(); ++input) extend(input, 0);
  for (std::size_t s = 0; s < plan.steps.size(); ++s) extend(plan.steps[s].output, s + 1);
  return lives;
}

}  // namespace

void lay_memory(PlanState& plan) {
  share_view_storage(plan);
  share_in_place_storage(plan);
  const std::vector<Life> lives = lifetimes(plan);

  std::vector<ValueId> order;
  for (ValueId id = 0; id < lives.size(); ++id) {
    if (lives[id].bytes > 0) order.push_back(id);
  }
  std::ranges::stable_sort(order, std::greater{}, [&](ValueId id) { return lives[id].bytes; });

  std::vector<ValueId> placed;  // by offset
  for (const ValueId id : order) {
    std::size_t offset = 0;
    for (const ValueId other : placed) {
      if (lives[id].last < lives[other].first || lives[other].last < lives[id].first) continue;
      const std::size_t begin = plan.values[other].offset_bytes;
      if (offset + lives[id].bytes <= begin) break;
      offset = std::max(offset, begin + lives[other].bytes);
    }
    plan.values[id].offset_bytes = offset;
    const auto position = std::ranges::upper_bound(
        placed, offset, {}, [&](ValueId other) { return plan.values[other].offset_bytes; });
    placed.insert(position, id);
    plan.arena_bytes = std::max(plan.arena_bytes, offset + lives[id].bytes);
  }
  for (Value& value : plan.values) value.offset_bytes = plan.values[value.storage].offset_bytes;
}

}  // namespace leadsman::internal
