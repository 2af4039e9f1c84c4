/* Print the first total yields of a hand-off file's first source: h5cc read_handoff.c -o read_handoff */
#include <hdf5.h>
#include <stdio.h>
#include <stdlib.h>

int main(int argc, char **argv) {
    hsize_t n[4];
    if (argc != 2) return 2;
    hid_t file = H5Fopen(argv[1], H5F_ACC_RDONLY, H5P_DEFAULT);
    if (file < 0) return 2;
    hid_t total = H5Dopen2(file, "total", H5P_DEFAULT);
    hid_t space = H5Dget_space(total);
    if (H5Sget_simple_extent_dims(space, n, NULL) != 4) return 2;
    double *y = malloc(n[0] * n[1] * n[2] * n[3] * sizeof *y);
    if (!y || H5Dread(total, H5T_NATIVE_DOUBLE, H5S_ALL, H5S_ALL, H5P_DEFAULT, y) < 0) return 2;
    /* metallicity, time, source, species: the last runs fastest; the first species at the last age */
    for (hsize_t z = 0; z < n[0]; z++)
        printf("%.17g\n", y[(z * n[1] + n[1] - 1) * n[2] * n[3]]);
    free(y);
    H5Sclose(space); H5Dclose(total); H5Fclose(file);
    return 0;
}
