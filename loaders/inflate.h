// Unpacking deflate (RFC 1951), for compressed .npz files. Our own, so that boards need no library
// built for them; speed matters little here, a bad stream must not.
#pragma once

#include <cstddef>
#include <span>

namespace leadsman::loaders {

/// Unpacks a raw deflate stream that must fill `to` exactly and take all of `from`. Throws
/// Error(kInput) when it does not, or is damaged; nothing is read or written outside the spans.
void inflate(std::span<const std::byte> from, std::span<std::byte> to);

/// Unpacks the first to.size() bytes, or all there are; returns how many. Throws Error(kInput) when
/// the stream is damaged before that.
std::size_t inflate_start(std::span<const std::byte> from, std::span<std::byte> to);

}  // namespace leadsman::loaders
