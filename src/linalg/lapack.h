/* The one place that declares BLAS and LAPACK. Fortran passes everything by reference and, after the
 * last argument, the hidden length of every character argument. Column-major storage.
 *
 * Rules (measured on OpenBLAS 0.3.21): a NaN can make dgees loop for ever and an infinity comes back as
 * NaN eigenvalues with info = 0, so scan with fg_all_finite before every factorisation. */
#ifndef FG_LINALG_LAPACK_H
#define FG_LINALG_LAPACK_H

#include <stddef.h>

typedef int (*fg_select2)(const double *, const double *);
typedef int (*fg_select3)(const double *, const double *, const double *);

void dgemm_(const char *ta, const char *tb, const int *m, const int *n, const int *k, const double *alpha,
            const double *a, const int *lda, const double *b, const int *ldb, const double *beta, double *c,
            const int *ldc, size_t, size_t);
void dgemv_(const char *t, const int *m, const int *n, const double *alpha, const double *a, const int *lda,
            const double *x, const int *incx, const double *beta, double *y, const int *incy, size_t);
void dtrsm_(const char *side, const char *uplo, const char *ta, const char *diag, const int *m, const int *n,
            const double *alpha, const double *a, const int *lda, double *b, const int *ldb, size_t, size_t,
            size_t, size_t);
void dgees_(const char *vectors, const char *sort, fg_select2 select, const int *n, double *a, const int *lda,
            int *sdim, double *wr, double *wi, double *vs, const int *ldvs, double *work, const int *lwork,
            int *bwork, int *info, size_t, size_t);
void dgges_(const char *left, const char *right, const char *sort, fg_select3 select, const int *n, double *a,
            const int *lda, double *b, const int *ldb, int *sdim, double *alphar, double *alphai,
            double *beta, double *vsl, const int *ldvsl, double *vsr, const int *ldvsr, double *work,
            const int *lwork, int *bwork, int *info, size_t, size_t, size_t);
void dgeev_(const char *left, const char *right, const int *n, double *a, const int *lda, double *wr,
            double *wi, double *vl, const int *ldvl, double *vr, const int *ldvr, double *work,
            const int *lwork, int *info, size_t, size_t);
void dggev_(const char *left, const char *right, const int *n, double *a, const int *lda, double *b,
            const int *ldb, double *alphar, double *alphai, double *beta, double *vl, const int *ldvl,
            double *vr, const int *ldvr, double *work, const int *lwork, int *info, size_t, size_t);
void dtrsyl_(const char *ta, const char *tb, const int *isgn, const int *m, const int *n, const double *a,
             const int *lda, const double *b, const int *ldb, double *c, const int *ldc, double *scale,
             int *info, size_t, size_t);
void dsyev_(const char *job, const char *uplo, const int *n, double *a, const int *lda, double *w,
            double *work, const int *lwork, int *info, size_t, size_t);
void dgesvd_(const char *ju, const char *jv, const int *m, const int *n, double *a, const int *lda, double *s,
             double *u, const int *ldu, double *vt, const int *ldvt, double *work, const int *lwork,
             int *info, size_t, size_t);
void zgesvd_(const char *ju, const char *jv, const int *m, const int *n, double *a, const int *lda, double *s,
             double *u, const int *ldu, double *vt, const int *ldvt, double *work, const int *lwork,
             double *rwork, int *info, size_t, size_t);
void zgesv_(const int *n, const int *nrhs, double *a, const int *lda, int *ipiv, double *b, const int *ldb,
            int *info);
void dgesv_(const int *n, const int *nrhs, double *a, const int *lda, int *ipiv, double *b, const int *ldb,
            int *info);
void dgecon_(const char *norm, const int *n, const double *a, const int *lda, const double *anorm,
             double *rcond, double *work, int *iwork, int *info, size_t);
void dgetrf_(const int *m, const int *n, double *a, const int *lda, int *ipiv, int *info);
void dgetrs_(const char *t, const int *n, const int *nrhs, const double *a, const int *lda, const int *ipiv,
             double *b, const int *ldb, int *info, size_t);
void dpotrf_(const char *uplo, const int *n, double *a, const int *lda, int *info, size_t);
void dpotrs_(const char *uplo, const int *n, const int *nrhs, const double *a, const int *lda, double *b,
             const int *ldb, int *info, size_t);
void dgeqrf_(const int *m, const int *n, double *a, const int *lda, double *tau, double *work,
             const int *lwork, int *info);
void dormqr_(const char *side, const char *t, const int *m, const int *n, const int *k, const double *a,
             const int *lda, const double *tau, double *c, const int *ldc, double *work, const int *lwork,
             int *info, size_t, size_t);
void dgebal_(const char *job, const int *n, double *a, const int *lda, int *ilo, int *ihi, double *scale,
             int *info, size_t);
void dgehrd_(const int *n, const int *ilo, const int *ihi, double *a, const int *lda, double *tau,
             double *work, const int *lwork, int *info);
void dorghr_(const int *n, const int *ilo, const int *ihi, double *a, const int *lda, const double *tau,
             double *work, const int *lwork, int *info);
void dtrevc3_(const char *side, const char *howmny, int *select, const int *n, const double *t,
              const int *ldt, double *vl, const int *ldvl, double *vr, const int *ldvr, const int *mm, int *m,
              double *work, const int *lwork, int *info, size_t, size_t);
void dpstrf_(const char *uplo, const int *n, double *a, const int *lda, int *piv, int *rank,
             const double *tol, double *work, int *info, size_t);

#endif
