//go:build sundials

#include "ida.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "_cgo_export.h"

static int residual(realtype t, N_Vector y, N_Vector yp, N_Vector r, void *user)
{
	islet_ida *s = user;
	return isletResidual(s->handle, t, N_VGetArrayPointer(y), N_VGetArrayPointer(yp), N_VGetArrayPointer(r));
}

// IDA clears the matrix, pattern included, before it calls.
static int jacobian(realtype t, realtype cj, N_Vector y, N_Vector yp, N_Vector r, SUNMatrix a, void *user,
		    N_Vector w1, N_Vector w2, N_Vector w3)
{
	islet_ida *s = user;
	(void)yp, (void)r, (void)w1, (void)w2, (void)w3;
	memcpy(SUNSparseMatrix_IndexPointers(a), s->p, (size_t)(s->n + 1) * sizeof *s->p);
	memcpy(SUNSparseMatrix_IndexValues(a), s->i, (size_t)s->nnz * sizeof *s->i);
	return isletJacobian(s->handle, t, cj, N_VGetArrayPointer(y), SUNSparseMatrix_Data(a));
}

static int weights(N_Vector y, N_Vector w, void *user)
{
	islet_ida *s = user;
	const double *yy = N_VGetArrayPointer(y);
	double *ww = N_VGetArrayPointer(w);
	for (int64_t k = 0; k < s->n; k++) {
		double v = yy[k] < 0 ? -yy[k] : yy[k];
		ww[k] = 1 / (s->rtol[k] * v + s->atol[k]);
	}
	return 0;
}

static void complaint(int code, const char *module, const char *function, char *text, void *user)
{
	islet_ida *s = user;
	snprintf(s->message, sizeof s->message, "%s %s (%d): %s", module, function, code, text);
}

islet_ida *islet_ida_new(int64_t n, uintptr_t handle)
{
	islet_ida *s = calloc(1, sizeof *s);
	if (!s)
		return NULL;
	s->n = n;
	s->handle = handle;
	if (SUNContext_Create(NULL, &s->ctx) == 0) {
		s->y = N_VNew_Serial(n, s->ctx);
		s->yp = N_VNew_Serial(n, s->ctx);
		s->out = N_VNew_Serial(n, s->ctx);
		s->id = N_VNew_Serial(n, s->ctx);
		s->mem = IDACreate(s->ctx);
	}
	s->rtol = calloc((size_t)n, sizeof *s->rtol);
	s->atol = calloc((size_t)n, sizeof *s->atol);
	if (s->y && s->yp && s->out && s->id && s->mem && s->rtol && s->atol)
		return s;
	islet_ida_free(s);
	return NULL;
}

static void drop_matrix(islet_ida *s)
{
	if (s->ls)
		SUNLinSolFree(s->ls);
	if (s->a)
		SUNMatDestroy(s->a);
	s->ls = NULL;
	s->a = NULL;
	free(s->p);
	free(s->i);
	s->p = s->i = NULL;
}

void islet_ida_free(islet_ida *s)
{
	if (s->mem)
		IDAFree(&s->mem);
	drop_matrix(s);
	if (s->y)
		N_VDestroy(s->y);
	if (s->yp)
		N_VDestroy(s->yp);
	if (s->out)
		N_VDestroy(s->out);
	if (s->id)
		N_VDestroy(s->id);
	free(s->rtol);
	free(s->atol);
	if (s->ctx)
		SUNContext_Free(&s->ctx);
	free(s);
}

// Once, with y, yp, id and the tolerances set.
int islet_ida_init(islet_ida *s, double t, int suppress_alg, int max_order, double max_step)
{
	int e;
	if ((e = IDASetErrHandlerFn(s->mem, complaint, s)) || (e = IDAInit(s->mem, residual, t, s->y, s->yp)) ||
	    (e = IDASetUserData(s->mem, s)) || (e = IDAWFtolerances(s->mem, weights)) || (e = IDASetId(s->mem, s->id)) ||
	    (e = IDASetSuppressAlg(s->mem, suppress_alg)) || (e = IDASetMaxOrd(s->mem, max_order)))
		return e;
	if (max_step > 0)
		return IDASetMaxStep(s->mem, max_step);
	return 0;
}

// A new pattern, and a fresh analysis of it with the next Jacobian.
int islet_ida_matrix(islet_ida *s, int64_t nnz, const int64_t *p, const int64_t *i, int ordering)
{
	int e;
	drop_matrix(s);
	s->nnz = nnz;
	s->p = malloc((size_t)(s->n + 1) * sizeof *p);
	s->i = malloc((size_t)nnz * sizeof *i);
	if (!s->p || !s->i)
		return IDA_MEM_FAIL;
	memcpy(s->p, p, (size_t)(s->n + 1) * sizeof *p);
	memcpy(s->i, i, (size_t)nnz * sizeof *i);
	s->a = SUNSparseMatrix(s->n, s->n, nnz, CSC_MAT, s->ctx);
	if (!s->a)
		return IDA_MEM_FAIL;
	memcpy(SUNSparseMatrix_IndexPointers(s->a), p, (size_t)(s->n + 1) * sizeof *p);
	memcpy(SUNSparseMatrix_IndexValues(s->a), i, (size_t)nnz * sizeof *i);
	s->ls = SUNLinSol_KLU(s->y, s->a, s->ctx);
	if (!s->ls)
		return IDA_MEM_FAIL;
	if ((e = SUNLinSol_KLUSetOrdering(s->ls, ordering)) || (e = IDASetLinearSolver(s->mem, s->ls, s->a)))
		return e;
	return IDASetJacFn(s->mem, jacobian);
}

// From t with the present y and yp; the history is forgotten.
int islet_ida_restart(islet_ida *s, double t, double first_step)
{
	int e = IDAReInit(s->mem, t, s->y, s->yp);
	return e ? e : IDASetInitStep(s->mem, first_step);
}

int islet_ida_step(islet_ida *s, double tmax, double *t)
{
	int e = IDASetStopTime(s->mem, tmax);
	s->message[0] = 0;
	return e ? e : IDASolve(s->mem, tmax, t, s->y, s->yp, IDA_ONE_STEP);
}

int islet_ida_dense(islet_ida *s, double t, int derivative)
{
	return IDAGetDky(s->mem, t, derivative, s->out);
}

void islet_ida_counts(islet_ida *s, long *setups, long *error_fails, long *solve_fails, long *iterations)
{
	*setups = *error_fails = *solve_fails = *iterations = 0;
	IDAGetNumLinSolvSetups(s->mem, setups);
	IDAGetNumErrTestFails(s->mem, error_fails);
	IDAGetNumStepSolveFails(s->mem, solve_fails);
	IDAGetNumNonlinSolvIters(s->mem, iterations);
}

void islet_ida_sum(islet_ida *s, int repeat)
{
	for (int k = 0; k < repeat; k++)
		N_VLinearSum(0.5, s->y, 0.25, s->id, s->out);
}
