/* Counts what one MPI process says to others, and how long it spends in MPI.
 *
 * Loaded before MPI (LD_PRELOAD), it stands in front of the functions below, as MPI's profiling interface
 * provides for. Fortran's entry points are caught too, for libraries written in it. Calls inside calls count
 * once. Compile: mpicc -O2 -shared -fPIC -o mpi_counter.so mpi_counter.c -Wl,--no-as-needed -lmpi_mpifh -ldl
 * (or with -DWITHOUT_FORTRAN and without that library).
 */
#define _GNU_SOURCE
#include <dlfcn.h>
#include <mpi.h>
#include <stddef.h>

/* Read from Python in this order: seconds in MPI, messages sent to others, bytes of these, reductions,
 * other collective calls. All-to-all exchanges count as messages to every rank that gets something. */
double lattice_mpi_counters[5];

enum { SECONDS, MESSAGES, BYTES, REDUCTIONS, COLLECTIVES };
static int depth;
static double entered;

static int outermost(void) { if (depth++) return 0; entered = PMPI_Wtime(); return 1; }
static void leave(void) { if (--depth == 0) lattice_mpi_counters[SECONDS] += PMPI_Wtime() - entered; }

static void sent(int count, MPI_Datatype type, int to) {
  int size;
  if (to == MPI_PROC_NULL) return;
  PMPI_Type_size(type, &size);
  lattice_mpi_counters[MESSAGES] += 1;
  lattice_mpi_counters[BYTES] += (double)count * size;
}

#define TIMED(count, call) { int own = outermost(), code; if (own) { count; } code = call; leave(); return code; }
#define NOTHING (void)0
#define SENT sent(n, t, to)
#define REDUCED lattice_mpi_counters[REDUCTIONS] += 1
#define COLLECTIVE lattice_mpi_counters[COLLECTIVES] += 1

int MPI_Send(const void *b, int n, MPI_Datatype t, int to, int g, MPI_Comm c) TIMED(SENT, PMPI_Send(b, n, t, to, g, c))
int MPI_Ssend(const void *b, int n, MPI_Datatype t, int to, int g, MPI_Comm c) TIMED(SENT, PMPI_Ssend(b, n, t, to, g, c))
int MPI_Isend(const void *b, int n, MPI_Datatype t, int to, int g, MPI_Comm c, MPI_Request *r) TIMED(SENT, PMPI_Isend(b, n, t, to, g, c, r))
int MPI_Issend(const void *b, int n, MPI_Datatype t, int to, int g, MPI_Comm c, MPI_Request *r) TIMED(SENT, PMPI_Issend(b, n, t, to, g, c, r))
int MPI_Sendrecv(const void *b, int n, MPI_Datatype t, int to, int g, void *rb, int rn, MPI_Datatype rt, int from, int rg, MPI_Comm c, MPI_Status *s) TIMED(SENT, PMPI_Sendrecv(b, n, t, to, g, rb, rn, rt, from, rg, c, s))
int MPI_Recv(void *b, int n, MPI_Datatype t, int from, int g, MPI_Comm c, MPI_Status *s) TIMED(NOTHING, PMPI_Recv(b, n, t, from, g, c, s))
int MPI_Wait(MPI_Request *r, MPI_Status *s) TIMED(NOTHING, PMPI_Wait(r, s))
int MPI_Waitall(int n, MPI_Request *r, MPI_Status *s) TIMED(NOTHING, PMPI_Waitall(n, r, s))
int MPI_Waitany(int n, MPI_Request *r, int *k, MPI_Status *s) TIMED(NOTHING, PMPI_Waitany(n, r, k, s))
int MPI_Waitsome(int n, MPI_Request *r, int *m, int *k, MPI_Status *s) TIMED(NOTHING, PMPI_Waitsome(n, r, m, k, s))
int MPI_Test(MPI_Request *r, int *f, MPI_Status *s) TIMED(NOTHING, PMPI_Test(r, f, s))
int MPI_Testall(int n, MPI_Request *r, int *f, MPI_Status *s) TIMED(NOTHING, PMPI_Testall(n, r, f, s))
int MPI_Probe(int from, int g, MPI_Comm c, MPI_Status *s) TIMED(NOTHING, PMPI_Probe(from, g, c, s))
int MPI_Iprobe(int from, int g, MPI_Comm c, int *f, MPI_Status *s) TIMED(NOTHING, PMPI_Iprobe(from, g, c, f, s))
int MPI_Barrier(MPI_Comm c) TIMED(COLLECTIVE, PMPI_Barrier(c))
int MPI_Bcast(void *b, int n, MPI_Datatype t, int root, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Bcast(b, n, t, root, c))
int MPI_Reduce(const void *b, void *o, int n, MPI_Datatype t, MPI_Op op, int root, MPI_Comm c) TIMED(REDUCED, PMPI_Reduce(b, o, n, t, op, root, c))
int MPI_Allreduce(const void *b, void *o, int n, MPI_Datatype t, MPI_Op op, MPI_Comm c) TIMED(REDUCED, PMPI_Allreduce(b, o, n, t, op, c))
int MPI_Reduce_scatter(const void *b, void *o, const int n[], MPI_Datatype t, MPI_Op op, MPI_Comm c) TIMED(REDUCED, PMPI_Reduce_scatter(b, o, n, t, op, c))
int MPI_Exscan(const void *b, void *o, int n, MPI_Datatype t, MPI_Op op, MPI_Comm c) TIMED(REDUCED, PMPI_Exscan(b, o, n, t, op, c))
int MPI_Scan(const void *b, void *o, int n, MPI_Datatype t, MPI_Op op, MPI_Comm c) TIMED(REDUCED, PMPI_Scan(b, o, n, t, op, c))
int MPI_Gather(const void *b, int n, MPI_Datatype t, void *o, int rn, MPI_Datatype rt, int root, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Gather(b, n, t, o, rn, rt, root, c))
int MPI_Gatherv(const void *b, int n, MPI_Datatype t, void *o, const int rn[], const int d[], MPI_Datatype rt, int root, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Gatherv(b, n, t, o, rn, d, rt, root, c))
int MPI_Scatterv(const void *b, const int n[], const int d[], MPI_Datatype t, void *o, int rn, MPI_Datatype rt, int root, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Scatterv(b, n, d, t, o, rn, rt, root, c))
int MPI_Allgather(const void *b, int n, MPI_Datatype t, void *o, int rn, MPI_Datatype rt, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Allgather(b, n, t, o, rn, rt, c))
int MPI_Allgatherv(const void *b, int n, MPI_Datatype t, void *o, const int rn[], const int d[], MPI_Datatype rt, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Allgatherv(b, n, t, o, rn, d, rt, c))
int MPI_Alltoall(const void *b, int n, MPI_Datatype t, void *o, int rn, MPI_Datatype rt, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Alltoall(b, n, t, o, rn, rt, c))
int MPI_Alltoallv(const void *b, const int n[], const int d[], MPI_Datatype t, void *o, const int rn[], const int od[], MPI_Datatype rt, MPI_Comm c) TIMED(COLLECTIVE, PMPI_Alltoallv(b, n, d, t, o, rn, od, rt, c))

static void exchanged(const int *n, const MPI_Datatype *t, MPI_Comm c) {
  int ranks, own, to;
  lattice_mpi_counters[COLLECTIVES] += 1;
  PMPI_Comm_size(c, &ranks);
  PMPI_Comm_rank(c, &own);
  for (to = 0; to < ranks; to++)
    if (to != own && n[to] > 0) sent(n[to], t[to], to);
}

int MPI_Alltoallw(const void *b, const int n[], const int d[], const MPI_Datatype t[], void *o, const int rn[], const int od[], const MPI_Datatype rt[], MPI_Comm c) TIMED(exchanged(n, t, c), PMPI_Alltoallw(b, n, d, t, o, rn, od, rt, c))

/* Persistent sends: what each will send is remembered under its request. */
#define MOST_REQUESTS 4096
static struct { MPI_Request request; int count; MPI_Datatype type; int to; } known[MOST_REQUESTS];
static int requests;

static void remember(MPI_Request r, int n, MPI_Datatype t, int to) {
  if (requests < MOST_REQUESTS) {
    known[requests].request = r; known[requests].count = n; known[requests].type = t; known[requests].to = to;
    requests++;
  }
}
static int place_of(MPI_Request r) {
  int k;
  for (k = 0; k < requests; k++) if (known[k].request == r) return k;
  return -1;
}
static void started(int n, MPI_Request r[]) {
  int k, place;
  for (k = 0; k < n; k++)
    if ((place = place_of(r[k])) >= 0) sent(known[place].count, known[place].type, known[place].to);
}

int MPI_Send_init(const void *b, int n, MPI_Datatype t, int to, int g, MPI_Comm c, MPI_Request *r) {
  int code = PMPI_Send_init(b, n, t, to, g, c, r);
  remember(*r, n, t, to);
  return code;
}
int MPI_Request_free(MPI_Request *r) {
  int place = place_of(*r);
  if (place >= 0) known[place] = known[--requests];
  return PMPI_Request_free(r);
}
int MPI_Start(MPI_Request *r) TIMED(started(1, r), PMPI_Start(r))
int MPI_Startall(int n, MPI_Request r[]) TIMED(started(n, r), PMPI_Startall(n, r))

#ifndef WITHOUT_FORTRAN
/* Fortran: every argument is an address; those beyond the ones given are passed on unread. */
typedef void (*Entry)(void *, void *, void *, void *, void *, void *, void *, void *, void *, void *, void *, void *);
#define FORTRAN(name, count) \
  void name(void *a0, void *a1, void *a2, void *a3, void *a4, void *a5, void *a6, void *a7, void *a8, void *a9, void *a10, void *a11) { \
    static Entry next; \
    int own = outermost(); \
    if (!next) next = (Entry)dlsym(RTLD_NEXT, #name); \
    if (own) { count; } \
    next(a0, a1, a2, a3, a4, a5, a6, a7, a8, a9, a10, a11); \
    leave(); \
  }
#define FORTRAN_SENT sent(*(MPI_Fint *)a1, PMPI_Type_f2c(*(MPI_Fint *)a2), *(MPI_Fint *)a3)
FORTRAN(mpi_send_, FORTRAN_SENT)
FORTRAN(mpi_ssend_, FORTRAN_SENT)
FORTRAN(mpi_isend_, FORTRAN_SENT)
FORTRAN(mpi_recv_, NOTHING)
FORTRAN(mpi_wait_, NOTHING)
FORTRAN(mpi_waitall_, NOTHING)
FORTRAN(mpi_waitany_, NOTHING)
FORTRAN(mpi_test_, NOTHING)
FORTRAN(mpi_probe_, NOTHING)
FORTRAN(mpi_iprobe_, NOTHING)
FORTRAN(mpi_barrier_, COLLECTIVE)
FORTRAN(mpi_bcast_, COLLECTIVE)
FORTRAN(mpi_reduce_, REDUCED)
FORTRAN(mpi_allreduce_, REDUCED)
FORTRAN(mpi_reduce_scatter_, REDUCED)
FORTRAN(mpi_gather_, COLLECTIVE)
FORTRAN(mpi_alltoall_, COLLECTIVE)
#endif
