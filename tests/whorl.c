/* The one file with the implementation: every test program of a configuration links its object. */
#define WHORL_IMPLEMENTATION
#include "whorl.h"
