/* Writes the kinds of JPEG that Pillow's writer does not offer, through libjpeg.
 *
 *   cc -O1 make_jpeg.c -ljpeg -o make_jpeg
 *   make_jpeg WIDTH HEIGHT IN OUT HxV RESTART CODING < pixels > file.jpg
 *
 * IN and OUT: grey, rgb, ycc, cmyk, ycck. HxV: sampling factors of the first component (and of the
 * fourth); the others have 1x1. RESTART: interval in MCUs, 0 for none. CODING: baseline,
 * progressive, scans (one baseline scan a component) or arithmetic.
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <jpeglib.h>

static J_COLOR_SPACE space_of(const char *name) {
  if (strcmp(name, "grey") == 0) return JCS_GRAYSCALE;
  if (strcmp(name, "rgb") == 0) return JCS_RGB;
  if (strcmp(name, "ycc") == 0) return JCS_YCbCr;
  if (strcmp(name, "cmyk") == 0) return JCS_CMYK;
  if (strcmp(name, "ycck") == 0) return JCS_YCCK;
  fprintf(stderr, "unknown colour space %s\n", name);
  exit(2);
}

static int components_of(J_COLOR_SPACE space) {
  return space == JCS_GRAYSCALE ? 1 : space == JCS_CMYK || space == JCS_YCCK ? 4 : 3;
}

int main(int argc, char **argv) {
  struct jpeg_compress_struct jpeg;
  struct jpeg_error_mgr errors;
  jpeg_scan_info scans[4];
  unsigned char *row;
  int across, down, i, row_bytes;

  if (argc != 8 || sscanf(argv[5], "%dx%d", &across, &down) != 2) return 2;
  jpeg.err = jpeg_std_error(&errors);
  jpeg_create_compress(&jpeg);
  jpeg_stdio_dest(&jpeg, stdout);
  jpeg.image_width = (JDIMENSION)atoi(argv[1]);
  jpeg.image_height = (JDIMENSION)atoi(argv[2]);
  jpeg.in_color_space = space_of(argv[3]);
  jpeg.input_components = components_of(jpeg.in_color_space);
  jpeg_set_defaults(&jpeg);
  jpeg_set_colorspace(&jpeg, space_of(argv[4]));
  jpeg_set_quality(&jpeg, 90, TRUE);
  for (i = 0; i < jpeg.num_components; ++i) {
    jpeg.comp_info[i].h_samp_factor = i % 3 == 0 ? across : 1;
    jpeg.comp_info[i].v_samp_factor = i % 3 == 0 ? down : 1;
  }
  jpeg.restart_interval = (unsigned)atoi(argv[6]);
  if (strcmp(argv[7], "progressive") == 0) jpeg_simple_progression(&jpeg);
  if (strcmp(argv[7], "arithmetic") == 0) jpeg.arith_code = TRUE;
  if (strcmp(argv[7], "scans") == 0) {
    memset(scans, 0, sizeof(scans));
    for (i = 0; i < jpeg.num_components; ++i) {
      scans[i].comps_in_scan = 1;
      scans[i].component_index[0] = i;
      scans[i].Se = 63;
    }
    jpeg.scan_info = scans;
    jpeg.num_scans = jpeg.num_components;
  }
  jpeg_start_compress(&jpeg, TRUE);
  row_bytes = (int)jpeg.image_width * jpeg.input_components;
  row = malloc((size_t)row_bytes);
  while (jpeg.next_scanline < jpeg.image_height) {
    if (fread(row, 1, (size_t)row_bytes, stdin) != (size_t)row_bytes) return 1;
    jpeg_write_scanlines(&jpeg, &row, 1);
  }
  jpeg_finish_compress(&jpeg);
  free(row);
  return 0;
}
