// Broken .safetensors and .npy files: what each is told, word for word.
#include <string>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/tensor_file.h"
#include "tests/loaders/tensor_bytes.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::input_error;
using testing::le;
using testing::npy_bytes;
using testing::patched;
using testing::safetensors_bytes;
using testing::ScratchFolder;
using testing::write_file;

struct BadFile {
  std::string bytes;
  std::string message;
};

void expect_refused(const std::vector<BadFile>& cases, const std::string& name) {
  const ScratchFolder folder;
  const std::string path = folder / name;
  for (const BadFile& bad : cases) {
    write_file(path, bad.bytes);
    EXPECT_EQ(input_error([&] { TensorFile::open(path); }), path + ": " + bad.message)
        << bad.bytes.substr(0, 200);
  }
}

BadFile header(std::string_view text, std::size_t data_bytes, std::string message) {
  return {safetensors_bytes(text, data_bytes), std::move(message)};
}

// One tensor x with this description, and eight bytes of data.
BadFile tensor(const std::string& description, std::string message) {
  return header("{\"x\":" + description + "}", 8, "tensor 'x': " + std::move(message));
}

TEST(BadSafetensors, LengthOfTheHeader) {
  expect_refused(
      {
          {"", "is empty"},
          {"1234567", "holds 7 bytes, too few for a .safetensors file"},
          {le(std::uint64_t{3}) + "{}",
           "the header is said to take 3 bytes, the file holds 2 after the first eight"},
          {le(std::uint64_t{0xffffffffffffffff}) + "{}",
           "the header is said to take 18446744073709551615 bytes, the file holds 2 after the "
           "first eight"},
          {le(std::uint64_t{0}) + "{}", "the header does not begin with '{'"},
          {le(std::uint64_t{0}), "the header does not begin with '{'"},
          header(" {}", 0, "the header does not begin with '{'"),
          header("[]", 0, "the header does not begin with '{'"),
      },
      "bad.safetensors");
}

TEST(BadSafetensors, Json) {
  expect_refused(
      {
          header("{", 0,
                 "line 1, column 2: not valid JSON: while parsing object key - unexpected end of "
                 "input; expected string literal"),
          header("{}x", 0,
                 "line 1, column 3: not valid JSON: while parsing value - invalid literal; last "
                 "read: '{}x'; expected end of input"),
          header("{}{}", 0,
                 "line 1, column 3: not valid JSON: while parsing value - unexpected '{'; expected "
                 "end of input"),
          header("{\"x\":{},}", 0, "tensor 'x': dtype is missing"),
          header("{\"__metadata__\":{},}", 0,
                 "line 1, column 20: not valid JSON: while parsing object key - unexpected '}'; "
                 "expected string literal"),
          header("{\"__metadata__\":{\"a\":\"\xff\"}}", 0,
                 "line 1, column 23: not valid JSON: while parsing value - invalid string: "
                 "ill-formed UTF-8 byte; last read: '\"\\xff'"),
          header("{\"a\xff\":1}", 0,
                 "line 1, column 4: not valid JSON: while parsing object key - invalid string: "
                 "ill-formed UTF-8 byte; last read: '\"a\\xff'; expected string literal"),
          header(std::string("{}\0trailing", 11), 0,
                 "line 1, column 3: not valid JSON: a zero byte"),
          header("{\"x\":[1]}", 0, "tensor 'x': an array where an object is wanted"),
          header("{\"x\":null}", 0, "tensor 'x': null where an object is wanted"),
          header("{\"x\":\"F32\"}", 0, "tensor 'x': a string where an object is wanted"),
          header("{\"x\":1}", 0, "tensor 'x': the number 1 where an object is wanted"),
          header("{\"\":{\"dtype\":\"F32\",\"shape\":[0],\"data_offsets\":[0,0]}}", 0,
                 "a tensor without a name"),
          header("{\"x\":{\"dtype\":\"F32\",\"shape\":[0],\"data_offsets\":[0,0]},\"x\":{}}", 0,
                 "'x' is given twice"),
          header("{\"__metadata__\":{},\"__metadata__\":{}}", 0, "'__metadata__' is given twice"),
          header("{\"__metadata__\":{\"a\":\"1\",\"a\":\"2\"}}", 0,
                 "__metadata__: the key 'a' is given twice"),
          header("{\"__metadata__\":{\"a\":1}}", 0,
                 "__metadata__: the number 1 where strings are wanted"),
          header("{\"__metadata__\":{\"a\":{}}}", 0,
                 "__metadata__: an object where strings are wanted"),
          header("{\"__metadata__\":{\"a\":[\"b\"]}}", 0,
                 "__metadata__: an array where strings are wanted"),
          header("{\"__metadata__\":null}", 0, "__metadata__: null where strings are wanted"),
          header("{\"__metadata__\":\"a\"}", 0, "__metadata__: a string where strings are wanted"),
      },
      "bad.safetensors");
}

TEST(BadSafetensors, Tensors) {
  expect_refused(
      {
          tensor(R"({"shape":[2],"data_offsets":[0,8]})", "dtype is missing"),
          tensor(R"({"dtype":"F32","data_offsets":[0,8]})", "shape is missing"),
          tensor(R"({"dtype":"F32","shape":[2]})", "data_offsets is missing"),
          tensor(R"({"dtype":"F32","dtype":"F32"})", "dtype is given twice"),
          tensor(R"({"dtype":"F31","shape":[2],"data_offsets":[0,8]})", "dtype 'F31' is not known"),
          tensor(R"({"dtype":"f32","shape":[2],"data_offsets":[0,8]})", "dtype 'f32' is not known"),
          tensor(R"({"dtype":7})", "the number 7 as dtype"),
          tensor(R"({"dtype":["F32"]})", "an array as dtype"),
          tensor(R"({"dtype":"F32","strides":[1]})", "the key 'strides' is not known"),
          tensor(R"({"shape":2})", "the number 2 as shape"),
          tensor(R"({"shape":{}})", "an object as shape"),
          tensor(R"({"shape":"2"})", "a string as shape"),
          tensor(R"({"shape":[-2]})", "the negative number -2 in shape"),
          tensor(R"({"shape":[2.0]})", "a number that is not an integer in shape: 2.0"),
          tensor(R"({"shape":[1e1]})", "a number that is not an integer in shape: 1e1"),
          tensor(R"({"shape":["2"]})", "a string among the numbers of shape"),
          tensor(R"({"shape":[[2]]})", "an array among the numbers of shape"),
          tensor(R"({"shape":[{}]})", "an object among the numbers of shape"),
          tensor(R"({"shape":[true]})", "true among the numbers of shape"),
          tensor(R"({"shape":[9223372036854775808]})",
                 "the number 9223372036854775808 in shape is too big"),
          tensor(R"({"shape":[1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1]})",
                 "shape has more than 32 numbers"),
          tensor(R"({"data_offsets":[0,8,9]})", "data_offsets has more than 2 numbers"),
          tensor(R"({"dtype":"F32","shape":[2],"data_offsets":[8]})",
                 "data_offsets has not two numbers"),
          tensor(R"({"data_offsets":[0,-8]})", "the negative number -8 in data_offsets"),
          tensor(R"({"dtype":"F32","shape":[2],"data_offsets":[8,0]})",
                 "data_offsets begin at 8, after their end at 0"),
          tensor(R"({"dtype":"F32","shape":[3],"data_offsets":[0,12]})",
                 "data_offsets end at 12, the file holds 8"),
          tensor(R"({"dtype":"F32","shape":[3],"data_offsets":[0,8]})",
                 "shape [3] of F32 takes 12 bytes, data_offsets span 8"),
          tensor(R"({"dtype":"F16","shape":[2],"data_offsets":[0,8]})",
                 "shape [2] of F16 takes 4 bytes, data_offsets span 8"),
          tensor(R"({"dtype":"U8","shape":[4294967296,4294967296],"data_offsets":[0,8]})",
                 "shape [4294967296, 4294967296] of U8 is more than any file can hold"),
          tensor(R"({"dtype":"F64","shape":[2305843009213693953],"data_offsets":[0,8]})",
                 "shape [2305843009213693953] of F64 is more than any file can hold"),
          tensor(R"({"dtype":"F32","shape":[1],"data_offsets":[4,8]})",
                 "data_offsets begin at 4, which leaves 4 bytes before it to no tensor"),
          header(R"({"x":{"dtype":"F32","shape":[1],"data_offsets":[0,4]}})", 8,
                 "the last 4 bytes of the data belong to no tensor"),
          header(
              R"({"a":{"dtype":"F32","shape":[2],"data_offsets":[0,8]},"b":{"dtype":"F32","shape":[2],"data_offsets":[4,12]}})",
              12, "tensor 'b': data_offsets begin at 4, inside tensor 'a'"),
          header(
              R"({"a":{"dtype":"F32","shape":[2],"data_offsets":[0,8]},"b":{"dtype":"F32","shape":[2],"data_offsets":[0,8]}})",
              8, "tensor 'b': data_offsets begin at 0, inside tensor 'a'"),
          header("{}", 1, "the last 1 bytes of the data belong to no tensor"),
      },
      "bad.safetensors");
}

TEST(BadSafetensors, DeepNestingDoesNotReachTheStack) {
  const std::string open(1 << 20, '[');
  std::string objects;
  for (int i = 0; i < 1 << 18; ++i) objects += "{\"a\":";
  expect_refused(
      {header("{\"x\":" + open, 0, "tensor 'x': an array where an object is wanted"),
       header("{\"x\":{\"shape\":" + open, 0, "tensor 'x': an array among the numbers of shape"),
       header(objects, 0, "tensor 'a': the key 'a' is not known")},
      "bad.safetensors");
}

TEST(BadSafetensors, NamesFitToBeShown) {
  expect_refused(
      {header("{\"\\u001b[31m\":1}", 0,
              "tensor '\\x1b[31m': the number 1 where an object is wanted"),
       header("{\"" + std::string(500, 'n') + "\":1}", 0,
              "tensor '" + std::string(120, 'n') + "...': the number 1 where an object is wanted")},
      "bad.safetensors");
}

TEST(BadNpy, Headers) {
  const std::string good = "{'descr': '<f4', 'fortran_order': False, 'shape': (2,), }";
  const std::string shape_of = "{'descr': '<f4', 'fortran_order': False, 'shape': ";
  expect_refused(
      {
          {"\x93NUMPY", "does not begin with an NPY header"},
          {"\x93NUMPZ" + npy_bytes(good, 8), "does not begin as an NPY file does"},
          {patched(npy_bytes(good, 8), 6, "\x04"),
           "is of NPY version 4.0; 1.0, 2.0 and 3.0 are read"},
          {patched(npy_bytes(good, 8), 7, "\x01"),
           "is of NPY version 1.1; 1.0, 2.0 and 3.0 are read"},
          {patched(npy_bytes(good, 8), 8, "\xff\xf0"),
           "NPY header: takes 61705 bytes, the file holds 75"},
          {patched(npy_bytes(good, 8), 6, std::string_view("\x02\x00\xff\xff\xff\xff", 6)),
           "NPY header: takes 4294967307 bytes, at most 65536 are read"},
          {npy_bytes("", 8), "NPY header: '{' is wanted at ''"},
          {npy_bytes("[]", 8), "NPY header: '{' is wanted at '[]'"},
          {npy_bytes("{}", 8), "NPY header: descr is missing"},
          {npy_bytes("{'descr': '<f4'}", 8), "NPY header: fortran_order is missing"},
          {npy_bytes("{'descr': '<f4', 'fortran_order': False}", 8),
           "NPY header: shape is missing"},
          {npy_bytes("{'descr': '<f4', 'descr': '<f4'}", 8), "NPY header: descr is given twice"},
          {npy_bytes("{'dtype': '<f4'}", 8), "NPY header: the key 'dtype' is not known"},
          {npy_bytes("{'descr' '<f4'}", 8), "NPY header: ':' is wanted at ''<f4'}'"},
          {npy_bytes("{'descr: <f4}", 8),
           "NPY header: the end of a string is wanted at ''descr: <f4}'"},
          {npy_bytes("{'descr': '<f3'}", 8),
           "NPY header: elements of type '<f3' are not read (b1, u1-u8, i1-i8, f2, f4 and f8 are)"},
          {npy_bytes("{'descr': '=f4'}", 8),
           "NPY header: elements of type '=f4' are not read (b1, u1-u8, i1-i8, f2, f4 and f8 are)"},
          {npy_bytes("{'descr': '|f4'}", 8),
           "NPY header: elements of type '|f4' are not read (b1, u1-u8, i1-i8, f2, f4 and f8 are)"},
          {npy_bytes("{'descr': '<c8'}", 8),
           "NPY header: elements of type '<c8' are not read (b1, u1-u8, i1-i8, f2, f4 and f8 are)"},
          {npy_bytes("{'descr': ''}", 8),
           "NPY header: elements of type '' are not read (b1, u1-u8, i1-i8, f2, f4 and f8 are)"},
          {npy_bytes("{'descr': '|O'}", 8),
           "NPY header: holds pickled Python objects, which are not read"},
          {npy_bytes("{'descr': [('a', '<f4')]}", 8), "NPY header: structured arrays are not read"},
          {npy_bytes("{'fortran_order': 0}", 8), "NPY header: True or False is wanted at '0}'"},
          {npy_bytes(shape_of + "2}", 8), "NPY header: '(' is wanted at '2}'"},
          {npy_bytes(shape_of + "(2)}", 8), "NPY header: ',' is wanted at ')}'"},
          {npy_bytes(shape_of + "(2,,)}", 8), "NPY header: a size is wanted at ',)}'"},
          {npy_bytes(shape_of + "(-2,)}", 8), "NPY header: a size is wanted at '-2,)}'"},
          {npy_bytes(shape_of + "(2.0,)}", 8), "NPY header: ',' is wanted at '.0,)}'"},
          {npy_bytes(shape_of + "(99999999999999999999,)}", 8),
           "NPY header: a size in the shape is too big"},
          {npy_bytes(shape_of + "(4294967296, 4294967296)}", 8),
           "NPY header: a shape of [4294967296, 4294967296] is more than any file can hold"},
          {npy_bytes(
               shape_of + "(1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1,1)}",
               4),
           "NPY header: a shape of more than 32 sizes"},
          {npy_bytes(good + "x", 8), "NPY header: the end is wanted at 'x'"},
          {npy_bytes(good, 7), "an array [2] of F32 takes 8 bytes, 7 follow the header"},
          {npy_bytes(good, 0), "an array [2] of F32 takes 8 bytes, 0 follow the header"},
          {npy_bytes(good, 12), "an array [2] of F32 takes 8 bytes, 12 follow the header"},
      },
      "bad.npy");
}

TEST(BadTensorFile, UnknownFormats) {
  expect_refused(
      {{"PNG or whatever", "is none of the known tensor files (.safetensors, .npz, .npy)"},
       {"\x89PNG\r\n\x1a\n", "is none of the known tensor files (.safetensors, .npz, .npy)"}},
      "bad.bin");
  expect_refused({{"{}", "does not begin as an NPZ (zip) file does"}}, "bad.npz");
}

}  // namespace
}  // namespace leadsman
