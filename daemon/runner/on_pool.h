// Runs blocking work on a pool's thread while the calling coroutine's own thread goes on.
#pragma once

#include <utility>  // before the Asio headers

#include <boost/asio/awaitable.hpp>
#include <boost/asio/co_spawn.hpp>
#include <boost/asio/thread_pool.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <memory>
#include <type_traits>

namespace nightweigh::runner {

// What `work()` returns, computed on the pool; its exceptions come back too. (`co_await post(pool)` would
// not do: in Boost 1.74 the coroutine would go on where it was.)
//
// The work lives behind a shared pointer and every object in here has a name: GCC 12 destroys temporaries
// with captures in an awaited expression twice.
template <class Work>
boost::asio::awaitable<std::invoke_result_t<Work&>> on_pool(boost::asio::thread_pool& pool, Work work) {
  using Value = std::invoke_result_t<Work&>;
  const auto shared = std::make_shared<Work>(std::move(work));
  auto task = [shared]() -> boost::asio::awaitable<Value> { co_return (*shared)(); };
  boost::asio::awaitable<Value> result =
      boost::asio::co_spawn(pool, std::move(task), boost::asio::use_awaitable);
  co_return co_await std::move(result);
}

}  // namespace nightweigh::runner
