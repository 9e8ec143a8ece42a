/* Workload W through SUNDIALS CVODE, Adams and fixed-point iteration, with the right-hand side in C.
   Compiled by bench.py against the SUNDIALS that a Python wheel brings; its few prototypes are stated here. */
#include <math.h>

typedef void *Handle;
int SUNContext_Create(int comm, Handle *context);
int SUNContext_Free(Handle *context);
Handle N_VNew_Serial(long length, Handle context);
double *N_VGetArrayPointer(Handle vector);
void N_VDestroy(Handle vector);
Handle CVodeCreate(int method, Handle context);
int CVodeInit(Handle solver, int (*rates)(double, Handle, Handle, void *), double t, Handle y);
int CVodeReInit(Handle solver, double t, Handle y);
int CVodeSStolerances(Handle solver, double relative, double absolute);
int CVodeSetUserData(Handle solver, void *data);
int CVodeSetMaxNumSteps(Handle solver, long steps);
Handle SUNNonlinSol_FixedPoint(Handle y, int m, Handle context);
int SUNNonlinSolFree(Handle nonlinear);
int CVodeSetNonlinearSolver(Handle solver, Handle nonlinear);
int CVode(Handle solver, double until, Handle y, double *reached, int task);
void CVodeFree(Handle *solver);

/* p: Vp Vi Vg E tp ti td Rm a1 C1 Ub C2 C3 U0 Um beta C4 Rg alpha C5, Gin, kappa = (1/Vi + 1/(E ti))/C4 */
static int rates(double t, Handle y, Handle slope, void *data)
{
    const double *p = data, *x = N_VGetArrayPointer(y);
    double *d = N_VGetArrayPointer(slope);
    double f1 = p[7] / (1 + exp((p[9] - x[2] / p[2]) / p[8]));
    double f2 = p[10] * (1 - exp(-x[2] / (p[11] * p[2])));
    double f4 = p[13] + (p[14] - p[13]) / (1 + pow(p[21] * x[1], -p[15]));
    double f5 = p[17] / (1 + exp(p[18] * (x[5] / p[0] - p[19])));
    double exchange = p[3] * (x[0] / p[0] - x[1] / p[1]);
    d[0] = f1 - exchange - x[0] / p[4];
    d[1] = exchange - x[1] / p[5];
    d[2] = p[20] - f2 - x[2] / (p[12] * p[2]) * f4 + f5;
    d[3] = 3 * (x[0] - x[3]) / p[6];
    d[4] = 3 * (x[3] - x[4]) / p[6];
    d[5] = 3 * (x[4] - x[5]) / p[6];
    (void)t;
    return 0;
}

/* n subjects of 22 numbers each; out[subject][2][minutes]: glucose mg/dL and insulin mU/L every minute. 0 where all went well. */
int cohort(const double *subjects, long n, const double *start, long minutes, double relative, double absolute, double *out)
{
    Handle context, y, solver, nonlinear;
    SUNContext_Create(0, &context);
    y = N_VNew_Serial(6, context);
    solver = CVodeCreate(1, context);
    CVodeInit(solver, rates, 0.0, y);
    CVodeSStolerances(solver, relative, absolute);
    CVodeSetMaxNumSteps(solver, 1000000);
    nonlinear = SUNNonlinSol_FixedPoint(y, 0, context);
    CVodeSetNonlinearSolver(solver, nonlinear);
    int failed = 0;
    for (long s = 0; s < n && !failed; s++) {
        const double *p = subjects + 22 * s;
        double *x = N_VGetArrayPointer(y), *glucose = out + 2 * s * minutes, *insulin = glucose + minutes;
        for (int i = 0; i < 6; i++) x[i] = start[i];
        CVodeSetUserData(solver, (void *)p);
        CVodeReInit(solver, 0.0, y);
        for (long m = 0; m < minutes && !failed; m++) {
            double reached;
            if (m > 0) failed = CVode(solver, (double)m, y, &reached, 1) < 0;
            glucose[m] = x[2] / (10 * p[2]);
            insulin[m] = x[0] / p[0];
        }
    }
    CVodeFree(&solver);
    SUNNonlinSolFree(nonlinear);
    N_VDestroy(y);
    SUNContext_Free(&context);
    return failed;
}
