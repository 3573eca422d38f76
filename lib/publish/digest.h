// SHA-256 of what is published; what it is: quotes/digest.h.
#pragma once

#include "quotes/digest.h"

namespace duskgrid::publish {

using quotes::digest_file;
using quotes::FileDigest;
using quotes::Sha256;

}  // namespace duskgrid::publish
