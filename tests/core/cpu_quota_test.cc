// Control groups as the kernel shows them, laid out in a folder.
#include "core/cpu_quota.h"

#include <filesystem>

#include <gtest/gtest.h>

#include "tests/support/files.h"

namespace leadsman::internal {
namespace {

using testing::ScratchFolder;

class CpuQuota : public ::testing::Test {
 protected:
  void file(const std::string& path, const std::string& text) const {
    const std::filesystem::path whole = folder_ / path;
    std::filesystem::create_directories(whole.parent_path());
    testing::write_file(whole.string(), text);
  }
  std::optional<double> quota() const { return cpu_quota(folder_ / ""); }

 private:
  ScratchFolder folder_;
};

TEST_F(CpuQuota, IsNoneWithoutGroups) {
  EXPECT_EQ(quota(), std::nullopt);
}

TEST_F(CpuQuota, IsNoneWhereTheGroupSaysMax) {
  file("proc/self/cgroup", "0::/\n");
  file("sys/fs/cgroup/cpu.max", "max 100000\n");
  EXPECT_EQ(quota(), std::nullopt);
}

// A container with a namespace of its own sees itself as the root.
TEST_F(CpuQuota, ReadsVersionTwoAtTheRoot) {
  file("proc/self/cgroup", "0::/\n");
  file("sys/fs/cgroup/cpu.max", "150000 100000\n");
  EXPECT_EQ(quota(), 1.5);
}

TEST_F(CpuQuota, TakesTheSmallestOnTheWayUp) {
  file("proc/self/cgroup", "0::/system.slice/leads.service/inner\n");
  file("sys/fs/cgroup/system.slice/leads.service/inner/cpu.max", "max 100000\n");
  file("sys/fs/cgroup/system.slice/leads.service/cpu.max", "50000 50000\n");
  file("sys/fs/cgroup/system.slice/cpu.max", "400000 100000\n");
  file("sys/fs/cgroup/other.slice/cpu.max", "10000 100000\n");
  EXPECT_EQ(quota(), 1.0);
}

TEST_F(CpuQuota, ReadsVersionOne) {
  file("proc/self/cgroup", "9:memory:/m\n4:cpu,cpuacct:/box\n1:name=systemd:/\n0::/\n");
  file("sys/fs/cgroup/cpu,cpuacct/box/cpu.cfs_quota_us", "250000\n");
  file("sys/fs/cgroup/cpu,cpuacct/box/cpu.cfs_period_us", "100000\n");
  file("sys/fs/cgroup/cpu,cpuacct/cpu.cfs_quota_us", "-1\n");
  file("sys/fs/cgroup/cpu,cpuacct/cpu.cfs_period_us", "100000\n");
  EXPECT_EQ(quota(), 2.5);
}

// Without a namespace the path is the host's, but only the container's own group is mounted.
TEST_F(CpuQuota, FallsBackToTheMountedRootOfVersionOne) {
  file("proc/self/cgroup", "3:cpuset:/docker/a1\n2:cpuacct,cpu:/docker/a1\n");
  file("sys/fs/cgroup/cpu/cpu.cfs_quota_us", "60000\n");
  file("sys/fs/cgroup/cpu/cpu.cfs_period_us", "100000\n");
  EXPECT_EQ(quota(), 0.6);
}

TEST_F(CpuQuota, OtherControllersDoNotCount) {
  file("proc/self/cgroup", "2:cpuacct:/box\n1:cpuset:/box\n");
  file("sys/fs/cgroup/cpuacct/box/cpu.cfs_quota_us", "10000\n");
  file("sys/fs/cgroup/cpuacct/box/cpu.cfs_period_us", "100000\n");
  EXPECT_EQ(quota(), std::nullopt);
}

TEST_F(CpuQuota, UnreadableTextLimitsNothing) {
  file("proc/self/cgroup", "0::/\nnonsense\n:\n");
  for (const char* text : {"", "many 100000", "100000", "-1 100000", "100000 0", "0 100000"}) {
    file("sys/fs/cgroup/cpu.max", text);
    EXPECT_EQ(quota(), std::nullopt) << text;
  }
}

}  // namespace
}  // namespace leadsman::internal
