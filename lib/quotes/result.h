// The answer of a call that may be unable to answer: a value, or a Failure that
// says what, where and why. Bad rows and bad underlyings are data, not failures
// (see ledger.h); broken invariants are asserts.
#pragma once

#include <cassert>
#include <string>
#include <utility>
#include <variant>

namespace duskgrid {

// What kind of thing went wrong; the program maps each to one exit status.
enum class Fault {
  usage,            // the command line or a stated option is wrong
  not_quotes,       // a file is there but is not such a CSV
  no_input,         // a file is missing, unreadable or not a file
  cannot_create,    // output cannot be written
  stopped,          // asked from outside to stop before the end
  configuration,    // the configuration file or a field of it is wrong
  not_enough_data,  // a numerical call has too little to work on
  no_convergence,   // a numerical call stopped without an answer
};

struct Failure {
  Fault fault;
  std::string where;   // file, field or step
  std::string detail;  // what is wrong and what to do
  std::string text() const { return where.empty() ? detail : where + ": " + detail; }
};

// Holds a T or a Failure. Look at ok() first; value() of a failure is a bug.
template <class T>
class [[nodiscard]] Result {
 public:
  Result(T value) : held_(std::move(value)) {}            // NOLINT(google-explicit-constructor)
  Result(Failure failure) : held_(std::move(failure)) {}  // NOLINT(google-explicit-constructor)

  bool ok() const { return std::holds_alternative<T>(held_); }
  explicit operator bool() const { return ok(); }

  const T& value() const& { return assert(ok()), std::get<T>(held_); }
  T& value() & { return assert(ok()), std::get<T>(held_); }
  T&& value() && { return assert(ok()), std::get<T>(std::move(held_)); }
  const T& operator*() const& { return value(); }
  T& operator*() & { return value(); }
  const T* operator->() const { return &value(); }
  T* operator->() { return &value(); }
  const Failure& failure() const { return assert(!ok()), std::get<Failure>(held_); }

 private:
  std::variant<T, Failure> held_;
};

}  // namespace duskgrid
