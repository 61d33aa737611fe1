/*
 * peer_csr.h: the general-purpose peer of products and solves: a CSR matrix (32-bit columns, double values) of a real sum over a
 * sorted list of states, its OpenMP product, and ARPACK (dsaupd, dseupd) on it.
 */
#ifndef PEER_CSR_INCLUDED
#define PEER_CSR_INCLUDED

#include "bench.h"

typedef struct peer_csr {
    uint64_t rows, elements;
    uint64_t *first;
    uint32_t *column;
    double *value;
    int threads;
    const double *x;
    double *y;
} peer_csr;

/* One row of the sum in the space: real coefficients only. Returns the number of elements, columns ascending not promised. */
static inline uint64_t peer_csr_row(const whorl_sum *sum, const whorl_space *space, uint64_t row, uint32_t *column,
                                    double *value)
{
    uint64_t state = whorl_space_at(space, row), k = 0, count = 0;
    while (k < sum->count) {
        uint64_t x = sum->terms[k].x;
        double total = 0.0;
        for (; k < sum->count && sum->terms[k].x == x; k++) {
            const whorl_term *term = &sum->terms[k];
            int32_t y = whorl_bits_count(x & term->z);
            double sign = (y & 2) != 0 ? -1.0 : 1.0; /* i^y for even y */
            total += (whorl_bits_parity(term->z & state) != 0 ? -sign : sign) * term->re;
        }
        if (total != 0.0) {
            column[count] = (uint32_t)whorl_space_find(space, state ^ x);
            value[count++] = total;
        }
    }
    return count;
}

static inline peer_csr peer_csr_make(const whorl_sum *sum, const whorl_space *space, int threads)
{
    peer_csr csr;
    int64_t i, rows = (int64_t)whorl_space_count(space);
    uint64_t i0;
    csr.rows = (uint64_t)rows;
    csr.threads = threads;
    csr.first = (uint64_t *)bench_memory(8 * (csr.rows + 1));
#ifdef _OPENMP
#pragma omp parallel for schedule(static) num_threads(threads)
#endif
    for (i = 0; i < rows; i++) {
        uint32_t column[4096];
        double value[4096];
        csr.first[i + 1] = peer_csr_row(sum, space, (uint64_t)i, column, value);
    }
    csr.first[0] = 0;
    for (i0 = 0; i0 < csr.rows; i0++)
        csr.first[i0 + 1] += csr.first[i0];
    csr.elements = csr.first[csr.rows];
    csr.column = (uint32_t *)bench_memory(4 * csr.elements);
    csr.value = (double *)bench_memory(8 * csr.elements);
#ifdef _OPENMP
#pragma omp parallel for schedule(static) num_threads(threads)
#endif
    for (i = 0; i < rows; i++)
        peer_csr_row(sum, space, (uint64_t)i, csr.column + csr.first[i], csr.value + csr.first[i]);
    csr.x = NULL;
    csr.y = NULL;
    return csr;
}

static inline void peer_csr_free(peer_csr *csr)
{
    free(csr->first);
    free(csr->column);
    free(csr->value);
}

static inline void peer_csr_product(void *argument)
{
    const peer_csr *csr = (const peer_csr *)argument;
    int64_t i, rows = (int64_t)csr->rows;
#ifdef _OPENMP
#pragma omp parallel for schedule(static) num_threads(csr->threads)
#endif
    for (i = 0; i < rows; i++) {
        double total = 0.0;
        uint64_t k;
        for (k = csr->first[i]; k < csr->first[i + 1]; k++)
            total += csr->value[k] * csr->x[csr->column[k]];
        csr->y[i] = total;
    }
}

#ifdef HAVE_ARPACK
void dsaupd_(int *ido, const char *bmat, const int *n, const char *which, const int *nev, const double *tol, double *resid,
             const int *ncv, double *v, const int *ldv, int *iparam, int *ipntr, double *workd, double *workl,
             const int *lworkl, int *info);
void dseupd_(const int *rvec, const char *howmny, int *select, double *d, double *z, const int *ldz, const double *sigma,
             const char *bmat, const int *n, const char *which, const int *nev, const double *tol, double *resid,
             const int *ncv, double *v, const int *ldv, int *iparam, int *ipntr, double *workd, double *workl,
             const int *lworkl, int *info);

/* The `wanted` lowest values of the matrix, ascending, with vectors computed as the library's solve does. Returns products. */
static inline int peer_arpack_lowest(peer_csr *csr, int wanted, double tolerance, double *values)
{
    int n = (int)csr->rows, ncv = 20 > 2 * wanted + 1 ? 20 : 2 * wanted + 1, ido = 0, info = 0, lworkl, products = 0, i;
    int iparam[11] = {0}, ipntr[11] = {0}, rvec = 1, *select;
    double *resid, *v, *workd, *workl, sigma = 0.0;
    if (ncv > n)
        ncv = n;
    lworkl = ncv * (ncv + 8);
    resid = (double *)bench_memory(8 * csr->rows);
    v = (double *)bench_memory(8 * csr->rows * (uint64_t)ncv);
    workd = (double *)bench_memory(24 * csr->rows);
    workl = (double *)bench_memory(8 * (uint64_t)lworkl);
    select = (int *)bench_memory(4 * (uint64_t)ncv);
    iparam[0] = 1;
    iparam[2] = 3000;
    iparam[6] = 1;
    for (;;) {
        dsaupd_(&ido, "I", &n, "SA", &wanted, &tolerance, resid, &ncv, v, &n, iparam, ipntr, workd, workl, &lworkl, &info);
        if (ido != 1 && ido != -1)
            break;
        csr->x = workd + ipntr[0] - 1;
        csr->y = workd + ipntr[1] - 1;
        peer_csr_product(csr);
        products++;
    }
    if (info == 0)
        dseupd_(&rvec, "A", select, values, v, &n, &sigma, "I", &n, "SA", &wanted, &tolerance, resid, &ncv, v, &n, iparam,
                ipntr, workd, workl, &lworkl, &info);
    if (info != 0)
        for (i = 0; i < wanted; i++)
            values[i] = NAN;
    free(resid);
    free(v);
    free(workd);
    free(workl);
    free(select);
    return products;
}
#endif
#endif
