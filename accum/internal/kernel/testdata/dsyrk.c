/* dsyrk times OpenBLAS on demand: a line "rows cols stride times" on standard
   input is answered by the nanoseconds that so many Gram sums of one block took.
   The first line of the output names the processor whose kernels are in use. */
#include <cblas.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>

extern char *openblas_get_corename(void);

int main(void) {
	int rows, cols, stride, times;
	printf("%s\n", openblas_get_corename());
	fflush(stdout);
	while (scanf("%d %d %d %d", &rows, &cols, &stride, &times) == 4) {
		double *x, *c;
		if (posix_memalign((void **)&x, 64, sizeof *x * stride * cols) || posix_memalign((void **)&c, 64, sizeof *c * cols * cols))
			return 1;
		for (int i = 0; i < stride * cols; i++)
			x[i] = (i * 7919 % 1000) / 500.0 - 1;
		for (int i = 0; i < cols * cols; i++)
			c[i] = 0;
		struct timespec from, to;
		cblas_dsyrk(CblasColMajor, CblasUpper, CblasTrans, cols, rows, 1, x, stride, 1, c, cols);
		clock_gettime(CLOCK_MONOTONIC, &from);
		for (int i = 0; i < times; i++)
			cblas_dsyrk(CblasColMajor, CblasUpper, CblasTrans, cols, rows, 1, x, stride, 1, c, cols);
		clock_gettime(CLOCK_MONOTONIC, &to);
		printf("%lld\n", (to.tv_sec - from.tv_sec) * 1000000000LL + (to.tv_nsec - from.tv_nsec));
		fflush(stdout);
		free(x);
		free(c);
	}
	return 0;
}
