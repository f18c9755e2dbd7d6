// Read by the sanitizers' libraries alone: where there is no memory, allocations return null, as
// they do without them, instead of ending the process.
extern "C" {

const char* __asan_default_options();  // NOLINT(bugprone-reserved-identifier)
const char* __asan_default_options() {
  return "allocator_may_return_null=1";
}

const char* __tsan_default_options();  // NOLINT(bugprone-reserved-identifier)
const char* __tsan_default_options() {
  return "allocator_may_return_null=1";
}

}  // extern "C"
