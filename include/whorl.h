/* whorl.h 0.1.0: every module of the library. See README.md; define WHORL_IMPLEMENTATION in exactly one source file. */
#include "whorl_core.h"
#include "whorl_pauli.h"
#include "whorl_space.h"
#include "whorl_map.h"
#include "whorl_dense.h"
#include "whorl_lattice.h"
#include "whorl_text.h"
#include "whorl_action.h"
