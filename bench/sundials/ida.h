//go:build sundials

#ifndef ISLET_IDA_H
#define ISLET_IDA_H

#include <stdint.h>

#include <ida/ida.h>
#include <nvector/nvector_serial.h>
#include <sundials/sundials_types.h>
#include <sundials/sundials_version.h>
#include <sunlinsol/sunlinsol_klu.h>
#include <sunmatrix/sunmatrix_sparse.h>

// All that belongs to one integration.
typedef struct {
	SUNContext ctx;
	void *mem;
	N_Vector y, yp, out; // end of the last step and its derivative; dense output
	N_Vector id;         // 1 for differential unknowns, 0 for algebraic ones
	double *rtol, *atol; // n: tolerances of each unknown
	SUNMatrix a;
	SUNLinearSolver ls;
	int64_t n, nnz;
	int64_t *p, *i; // pattern of the matrix: n+1 columns' starts, nnz rows
	uintptr_t handle;
	char message[400]; // the last complaint
} islet_ida;

islet_ida *islet_ida_new(int64_t n, uintptr_t handle);
void islet_ida_free(islet_ida *s);
int islet_ida_init(islet_ida *s, double t, int suppress_alg, int max_order, double max_step);
int islet_ida_matrix(islet_ida *s, int64_t nnz, const int64_t *p, const int64_t *i, int ordering);
int islet_ida_restart(islet_ida *s, double t, double first_step);
int islet_ida_step(islet_ida *s, double tmax, double *t);
int islet_ida_dense(islet_ida *s, double t, int derivative);
void islet_ida_counts(islet_ida *s, long *setups, long *error_fails, long *solve_fails, long *iterations);
void islet_ida_sum(islet_ida *s, int repeat);

#endif
