#include "core/cpu_quota.h"

#include <algorithm>
#include <fstream>
#include <vector>

namespace leadsman::internal {
namespace {

using Quota = std::optional<double>;

// Version 2: one file, "150000 100000" or "max 100000" (microseconds of a period).
Quota read_version_2(const std::string& group) {
  std::ifstream file(group + "/cpu.max");
  double quota = 0.0;
  double period = 0.0;
  if (!(file >> quota >> period) || quota <= 0.0 || period <= 0.0) return std::nullopt;
  return quota / period;
}

// Version 1: two files; a quota of -1 is none.
Quota read_version_1(const std::string& group) {
  std::ifstream quota_file(group + "/cpu.cfs_quota_us");
  std::ifstream period_file(group + "/cpu.cfs_period_us");
  double quota = 0.0;
  double period = 0.0;
  if (!(quota_file >> quota) || !(period_file >> period)) return std::nullopt;
  if (quota <= 0.0 || period <= 0.0) return std::nullopt;
  return quota / period;
}

// The smallest quota from `path` up to the root of the hierarchy. Inside a container the path may
// be the host's, of which nothing is there but the root: the container's own group.
Quota smallest_upwards(const std::string& hierarchy, std::string path,
                       Quota (*read)(const std::string& group)) {
  Quota smallest;
  while (true) {
    if (!path.empty() && path.back() == '/') path.pop_back();
    if (const Quota quota = read(hierarchy + path)) {
      smallest = smallest ? std::min(*smallest, *quota) : *quota;
    }
    if (path.empty()) return smallest;
    path.erase(std::min(path.size(), path.rfind('/')));
  }
}

bool names_cpu_controller(const std::string& controllers) {
  return ("," + controllers + ",").find(",cpu,") != std::string::npos;
}

}  // namespace

std::optional<double> cpu_quota(const std::string& root) {
  const std::string groups = root + "/sys/fs/cgroup";
  std::ifstream file(root + "/proc/self/cgroup");
  std::string line;
  // Each line is ID:CONTROLLERS:PATH; version 2 has ID 0 and no controllers.
  while (std::getline(file, line)) {
    const std::size_t first = line.find(':');
    const std::size_t second = line.find(':', first + 1);
    if (first == std::string::npos || second == std::string::npos) continue;
    const std::string controllers = line.substr(first + 1, second - first - 1);
    const std::string path = line.substr(second + 1);
    Quota quota;
    if (controllers.empty()) {
      quota = smallest_upwards(groups, path, read_version_2);
    } else if (names_cpu_controller(controllers)) {
      quota = smallest_upwards(groups + "/" + controllers, path, read_version_1);
      if (!quota) quota = smallest_upwards(groups + "/cpu", path, read_version_1);
    }
    if (quota) return quota;
  }
  return std::nullopt;
}

}  // namespace leadsman::internal
