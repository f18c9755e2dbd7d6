#include "loaders/atomic_file.h"

#include <cstdlib>
#include <filesystem>
#include <string>

#include <gtest/gtest.h>
#include <sys/stat.h>
#include <unistd.h>

#include "loaders/mapped_file.h"
#include "tests/support/files.h"

namespace leadsman::loaders {
namespace {

namespace fs = std::filesystem;
using leadsman::testing::input_error;
using leadsman::testing::read_file;
using leadsman::testing::ScratchFolder;
using leadsman::testing::write_file;

// Root may do everything; the tests of permissions act as somebody else.
class AsNobody {
 public:
  AsNobody() : root_(::geteuid() == 0) {
    if (root_ && ::seteuid(65534) != 0) works_ = false;
  }
  ~AsNobody() {
    if (root_ && ::seteuid(0) != 0) std::abort();
  }
  bool works() const { return works_; }

 private:
  bool root_;
  bool works_ = true;
};

TEST(AtomicFile, WritesSmallAndLargePiecesInOrder) {
  const ScratchFolder folder;
  std::string expected;
  AtomicFile file(folder / "out");
  for (int i = 0; i < 2000; ++i) {
    const std::string piece(static_cast<std::size_t>(i * 37 % 997),
                            static_cast<char>('a' + i % 26));
    file.write(piece);
    expected += piece;
  }
  const std::string large(200'000, 'L');
  file.write(large);
  file.write("end");
  expected += large + "end";
  EXPECT_EQ(file.written(), expected.size());
  EXPECT_FALSE(fs::exists(folder / "out"));
  file.commit();
  EXPECT_TRUE(read_file(folder / "out") == expected);
  EXPECT_EQ(folder.count(), 1u);
}

TEST(AtomicFile, LeavesTheOldFileAndNoTraceWithoutCommit) {
  const ScratchFolder folder;
  write_file(folder / "out", "old");
  {
    AtomicFile file(folder / "out");
    file.write("new");
    EXPECT_EQ(folder.count(), 2u);
  }
  EXPECT_EQ(read_file(folder / "out"), "old");
  EXPECT_EQ(folder.count(), 1u);
}

TEST(AtomicFile, KeepsPermissionsAndFollowsLinks) {
  const ScratchFolder folder;
  fs::create_directory(folder / "real");
  write_file(folder / "real/target", "old");
  ::chmod((folder / "real/target").c_str(), 0640);
  fs::create_symlink("real/target", folder / "link");
  write_text_file(folder / "link", "new");
  EXPECT_TRUE(fs::is_symlink(folder / "link"));
  EXPECT_EQ(read_file(folder / "real/target"), "new");
  struct stat status {};
  ASSERT_EQ(::stat((folder / "real/target").c_str(), &status), 0);
  EXPECT_EQ(status.st_mode & 07777u, 0640u);
}

TEST(AtomicFile, ReplacingLeavesMappedContentsReadable) {
  const ScratchFolder folder;
  write_file(folder / "out", "old contents");
  const auto mapped = MappedFile::open(folder / "out");
  write_text_file(folder / "out", "x");
  EXPECT_EQ(std::string(reinterpret_cast<const char*>(mapped->bytes().data()), 12), "old contents");
}

TEST(AtomicFile, SaysWhyAPathCannotBeWritten) {
  const ScratchFolder folder;
  fs::create_directory(folder / "sub");
  const auto message = [](const std::string& path) {
    return input_error([&] { AtomicFile file(path); });
  };
  EXPECT_EQ(message(folder / "sub"), folder / "sub: is a folder, not a file");
  EXPECT_EQ(message(folder / "no/out"),
            folder / "no/out: cannot be written: the folder does not exist");
  EXPECT_EQ(message(folder / "sub/"), "'" + folder / "sub/': is not a name for a file");
  EXPECT_EQ(message(""), "'': is not a name for a file");
  EXPECT_EQ(message("/dev/null"), "/dev/null: is not a regular file");
  EXPECT_TRUE(fs::is_character_file("/dev/null"));
  write_file(folder / "file", "");
  EXPECT_EQ(message(folder / "file/out"), folder / "file/out: cannot be written: Not a directory");
}

TEST(AtomicFile, RespectsPermissions) {
  const ScratchFolder folder;
  write_file(folder / "locked", "old");
  ::chmod((folder / "locked").c_str(), 0444);
  ::chmod(folder.path().c_str(), 0555);
  const AsNobody nobody;
  if (!nobody.works()) GTEST_SKIP() << "cannot act as another user";
  EXPECT_EQ(input_error([&] { AtomicFile file(folder / "locked"); }),
            folder / "locked: cannot be replaced: Permission denied");
  EXPECT_EQ(input_error([&] { AtomicFile file(folder / "new"); }),
            folder / "new: cannot be written: Permission denied");
}

TEST(MappedFile, SaysWhyAPathCannotBeRead) {
  const ScratchFolder folder;
  fs::create_directory(folder / "sub");
  fs::create_symlink("nowhere", folder / "dangling");
  fs::create_symlink("loop", folder / "loop");
  ASSERT_EQ(::mkfifo((folder / "pipe").c_str(), 0600), 0);
  const auto message = [](const std::string& path) {
    return input_error([&] { MappedFile::open(path); });
  };
  EXPECT_EQ(message(folder / "missing"), folder / "missing: no such file or folder");
  EXPECT_EQ(message(folder / "sub"), folder / "sub: is a folder, not a file");
  EXPECT_EQ(message(folder / "pipe"), folder / "pipe: is not a regular file");
  EXPECT_EQ(message(folder / "dangling"),
            folder / "dangling: is a symbolic link to 'nowhere', which does not exist");
  EXPECT_EQ(message(folder / "loop"),
            folder / "loop: cannot be opened: Too many levels of symbolic links");
  EXPECT_EQ(message(""), "an empty path where a file is wanted");
  write_file(folder / "secret", "x");
  ::chmod((folder / "secret").c_str(), 0000);
  ::chmod(folder.path().c_str(), 0755);
  const AsNobody nobody;
  if (!nobody.works()) GTEST_SKIP() << "cannot act as another user";
  EXPECT_EQ(message(folder / "secret"), folder / "secret: cannot be opened: Permission denied");
}

TEST(MappedFile, ReadsEmptyAndLinkedFilesAndHoldsToALimit) {
  const ScratchFolder folder;
  write_file(folder / "empty", "");
  write_file(folder / "ten", "0123456789");
  fs::create_symlink("ten", folder / "link");
  EXPECT_TRUE(MappedFile::open(folder / "empty")->bytes().empty());
  EXPECT_EQ(read_text_file(folder / "empty", 10), "");
  EXPECT_EQ(read_text_file(folder / "link", 10), "0123456789");
  EXPECT_EQ(input_error([&] { read_text_file(folder / "ten", 9); }),
            folder / "ten: holds 10 bytes, at most 9 are read");
  EXPECT_TRUE(path_exists(folder / "link"));
  EXPECT_FALSE(path_exists(folder / "missing"));
  EXPECT_TRUE(is_folder(folder.path()));
  EXPECT_FALSE(is_folder(folder / "ten"));
}

}  // namespace
}  // namespace leadsman::loaders
