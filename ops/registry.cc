// Every operator there is: one line each.
#include <algorithm>
#include <array>

#include "ops/activation/activation.h"
#include "ops/adaptive_avg_pool/adaptive_avg_pool.h"
#include "ops/adaptive_max_pool/adaptive_max_pool.h"
#include "ops/add/add.h"
#include "ops/attention/attention.h"
#include "ops/attention_weights/attention_weights.h"
#include "ops/avg_pool/avg_pool.h"
#include "ops/batch_norm/batch_norm.h"
#include "ops/channel_pool/channel_pool.h"
#include "ops/channel_shuffle/channel_shuffle.h"
#include "ops/class_token/class_token.h"
#include "ops/concat/concat.h"
#include "ops/conv2d/conv2d.h"
#include "ops/features_to_image/features_to_image.h"
#include "ops/flatten/flatten.h"
#include "ops/group_norm/group_norm.h"
#include "ops/identity/identity.h"
#include "ops/image_to_tokens/image_to_tokens.h"
#include "ops/l2_normalize/l2_normalize.h"
#include "ops/layer_norm/layer_norm.h"
#include "ops/linear/linear.h"
#include "ops/local_response_norm/local_response_norm.h"
#include "ops/max_pool/max_pool.h"
#include "ops/mean/mean.h"
#include "ops/mul/mul.h"
#include "ops/operator.h"
#include "ops/pad/pad.h"
#include "ops/position_embed/position_embed.h"
#include "ops/resize/resize.h"
#include "ops/scale/scale.h"
#include "ops/select/select.h"
#include "ops/slice/slice.h"
#include "ops/softmax/softmax.h"
#include "ops/space_to_depth/space_to_depth.h"
#include "ops/tokens_to_image/tokens_to_image.h"
#include "ops/transpose/transpose.h"
#include "ops/window_attention/window_attention.h"

namespace leadsman::ops {

std::span<const Operator* const> all_operators() {
  static const std::array all{
      &activation_operator(),
      &adaptive_avg_pool_operator(),
      &adaptive_max_pool_operator(),
      &add_operator(),
      &attention_operator(),
      &attention_weights_operator(),
      &avg_pool_operator(),
      &batch_norm_operator(),
      &channel_pool_operator(),
      &channel_shuffle_operator(),
      &class_token_operator(),
      &concat_operator(),
      &conv2d_operator(),
      &features_to_image_operator(),
      &flatten_operator(),
      &group_norm_operator(),
      &identity_operator(),
      &image_to_tokens_operator(),
      &l2_normalize_operator(),
      &layer_norm_operator(),
      &linear_operator(),
      &local_response_norm_operator(),
      &max_pool_operator(),
      &mean_operator(),
      &mul_operator(),
      &pad_operator(),
      &position_embed_operator(),
      &resize_operator(),
      &scale_operator(),
      &select_operator(),
      &slice_operator(),
      &softmax_operator(),
      &space_to_depth_operator(),
      &tokens_to_image_operator(),
      &transpose_operator(),
      &window_attention_operator(),
  };
  return all;
}

const Operator* find_operator(std::string_view name) {
  const auto all = all_operators();
  const auto found = std::ranges::find_if(
      all, [&](const Operator* candidate) { return candidate->contract().name == name; });
  return found == all.end() ? nullptr : *found;
}

}  // namespace leadsman::ops
