// How much processor time the control groups of this process (containers, systemd units) allow.
//
// Source: the kernel's documentation, admin-guide/cgroup-v2.rst ("cpu.max") and
// scheduler/sched-bwc.rst (version 1: cpu.cfs_quota_us, cpu.cfs_period_us). A group's quota holds
// for all groups below it, so the smallest on the way up counts.
#pragma once

#include <optional>
#include <string>

namespace leadsman::internal {

/// CPUs' worth of time in each period, 1.5 say; nothing when there is no limit. Reads
/// `root`/proc/self/cgroup and `root`/sys/fs/cgroup; what cannot be read limits nothing.
std::optional<double> cpu_quota(const std::string& root = "");

}  // namespace leadsman::internal
